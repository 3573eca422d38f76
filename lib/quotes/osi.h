// The 21-character option symbol of the options symbology initiative (in use since
// 2010): root 6, yymmdd 6, C or P, strike times 1000 in 8 digits.
#pragma once

#include <chrono>
#include <optional>
#include <string>
#include <string_view>

#include "quotes/quote.h"

namespace duskgrid::quotes {

struct OsiSymbol {
  std::string root;  // spaces trimmed
  std::chrono::year_month_day expiry;
  PutCall put_call;
  double strike;  // quote currency
  bool adjusted;  // the root ends in a digit: an adjusted contract (common practice)
};

// Reads the padded form and the form with the padding spaces removed; nothing when
// it is neither (root of 1 to 6 letters and digits, a date that exists).
std::optional<OsiSymbol> parse_osi(std::string_view text);
// The 21-character form; root cut to 6, strike rounded to a thousandth. Empty when the
// form cannot hold the contract: a year outside 2000..2099, a strike outside 0..99999.999.
std::string format_osi(const OsiSymbol& symbol);

}  // namespace duskgrid::quotes
