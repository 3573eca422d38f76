// The text of one cell as a number, a null or a word. Dates are instants.h, OSI
// symbols osi.h.
#pragma once

#include <array>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/quote.h"

namespace duskgrid::quotes {

// How a group of files writes numbers, and its words for nothing.
class CellRules {
 public:
  // `thousands` may be 0 for none. `null_words` come beside NA, N/A, null, nan, none,
  // - and the empty cell. With `lone_group_is_doubt` "1,250" is refused, which may be a decimal
  // comma, but not "1,250.00" or "1,250,000".
  CellRules(char decimal, char thousands, const std::vector<std::string>& null_words,
            bool lone_group_is_doubt = false);

  // True for a null word in any case (ASCII). The cell comes trimmed.
  bool is_null(std::string_view cell) const;

  // A decimal number, correctly rounded: optional sign, digits, optional fraction and
  // exponent, and the thousands separator only between groups of three digits of the whole
  // part. Nothing for all else: currency and percent signs, inf, nan, hexadecimal,
  // and numbers past the range of double.
  std::optional<double> number(std::string_view cell) const;

 private:
  char decimal_;
  char thousands_;
  bool lone_group_is_doubt_;
  std::vector<std::string> null_words_;  // lower case
  std::size_t longest_null_ = 0;
  std::array<bool, 256> opens_null_{};  // first bytes of null words, both cases
};

// Nothing but spaces and tabs.
bool is_blank(std::string_view text);
// Without spaces and tabs at either end.
std::string_view trim(std::string_view text);
// ASCII lower case.
std::string lower(std::string_view text);
// Lower case without dots and spaces: "A.M." is "am".
std::string fold_word(std::string_view text);

// C, P, call, put in any case, or the codes of FIX field 201: 0 put, 1 call.
std::optional<PutCall> parse_put_call(std::string_view cell);
// European, American, E, A in any case, or the codes of FIX field 1194: 0 European, 1 American.
std::optional<Exercise> parse_exercise(std::string_view cell);

// A name as files write it: 1 to 80 bytes, no control characters (three times as many make a file
// name).
bool is_name(std::string_view text);

}  // namespace duskgrid::quotes
