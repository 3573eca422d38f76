#include "quotes/cells.h"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <cstdint>

namespace duskgrid::quotes {
namespace {

constexpr std::size_t kLongestName = 80;
// Grouped numbers are rewritten in a buffer of this size. Any double, written in full
// with its groups, of a size a market quotes, is far shorter.
constexpr std::size_t kLongestRewritten = 64;

bool is_digit(char c) { return c >= '0' && c <= '9'; }
bool is_blank(char c) { return c == ' ' || c == '\t'; }
char to_lower(char c) { return c >= 'A' && c <= 'Z' ? static_cast<char>(c - 'A' + 'a') : c; }
char to_upper(char c) { return c >= 'a' && c <= 'z' ? static_cast<char>(c - 'a' + 'A') : c; }

// Digits with a point among them or none, as nearly all cells are: a whole number below 2^53 over a
// power of ten up to 10^22 is two exact doubles, and their quotient correctly rounded (W. Clinger,
// PLDI 1990).
std::optional<double> short_number(std::string_view text) {
  constexpr std::size_t kMostDigits = 15;
  constexpr std::array<double, kMostDigits + 1> kPowers{
      1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15};
  if (text.empty() || text.size() > kMostDigits) return std::nullopt;
  std::int64_t whole = 0;
  std::size_t point = text.size();
  for (std::size_t i = 0; i < text.size(); ++i) {
    if (is_digit(text[i])) {
      whole = 10 * whole + (text[i] - '0');
    } else if (text[i] == '.' && point == text.size()) {
      point = i;
    } else {
      return std::nullopt;
    }
  }
  if (text.size() == 1 && point == 0) return std::nullopt;
  const auto value = static_cast<double>(whole);
  return point == text.size() ? value : value / kPowers[text.size() - point - 1];
}

// A plain number, '.' for the decimal, no groups. from_chars takes inf and nan too,
// which never start with a digit or point, and no leading plus.
std::optional<double> plain_number(std::string_view text) {
  const bool minus = text.starts_with('-');
  if (text.starts_with('+')) text.remove_prefix(1);
  const std::string_view digits = text.substr(minus ? 1 : 0);
  if (digits.empty() || !(is_digit(digits.front()) || digits.front() == '.')) return std::nullopt;
  double value;
  const char* const end = text.data() + text.size();
  const auto [stop, error] = std::from_chars(text.data(), end, value);
  if (error != std::errc{} || stop != end || !std::isfinite(value)) return std::nullopt;
  return value;
}

// "1,234,567" without its separators; nothing when a group has not three digits.
std::optional<std::string_view> ungrouped(std::string_view whole, char separator, char* to) {
  std::size_t size = 0;
  std::size_t since_separator = 0;
  bool grouped = false;
  for (const char c : whole) {
    if (c == separator) {
      const bool sound = grouped ? since_separator == 3 : since_separator >= 1;
      if (!sound || since_separator > 3) return std::nullopt;
      grouped = true;
      since_separator = 0;
    } else {
      if (!is_digit(c)) return std::nullopt;
      ++since_separator;
      to[size++] = c;
    }
  }
  if (grouped && since_separator != 3) return std::nullopt;
  return std::string_view(to, size);
}

}  // namespace

CellRules::CellRules(char decimal, char thousands, const std::vector<std::string>& null_words,
                     bool lone_group_is_doubt)
    : decimal_(decimal),
      thousands_(thousands),
      lone_group_is_doubt_(lone_group_is_doubt),
      null_words_{"na", "n/a", "null", "nan", "none", "-"} {
  for (const std::string& word : null_words) {
    null_words_.push_back(lower(trim(word)));
  }
  std::erase(null_words_, std::string());
  for (const std::string& word : null_words_) {
    longest_null_ = std::max(longest_null_, word.size());
    opens_null_[static_cast<unsigned char>(word.front())] = true;
    opens_null_[static_cast<unsigned char>(to_upper(word.front()))] = true;
  }
}

bool CellRules::is_null(std::string_view cell) const {
  if (cell.empty()) return true;
  if (!opens_null_[static_cast<unsigned char>(cell.front())] || cell.size() > longest_null_) {
    return false;
  }
  const auto same = [&](const std::string& word) {
    return std::equal(cell.begin(), cell.end(), word.begin(), word.end(),
                      [](char a, char b) { return to_lower(a) == b; });
  };
  return std::any_of(null_words_.begin(), null_words_.end(), same);
}

std::optional<double> CellRules::number(std::string_view cell) const {
  // Nearly every cell is plain; with a decimal comma a point would be a separator.
  if (decimal_ == '.') {
    if (const auto value = short_number(cell)) return value;
    if (const auto value = plain_number(cell)) return value;
  }
  if (cell.size() > kLongestRewritten) return std::nullopt;
  std::array<char, kLongestRewritten> text;
  const std::size_t sign = cell.starts_with('-') || cell.starts_with('+') ? 1 : 0;
  std::size_t whole = sign;
  const auto in_whole = [&](char c) { return is_digit(c) || (c == thousands_ && c != 0); };
  while (whole < cell.size() && in_whole(cell[whole])) ++whole;
  std::copy_n(cell.begin(), sign, text.begin());
  const auto digits = ungrouped(cell.substr(sign, whole - sign), thousands_, text.data() + sign);
  if (!digits) return std::nullopt;
  const bool lone_group = whole == cell.size() && whole - sign == digits->size() + 1;
  if (lone_group && lone_group_is_doubt_) return std::nullopt;
  std::size_t size = sign + digits->size();
  for (const char c : cell.substr(whole)) {
    if (decimal_ == ',' && c == '.') return std::nullopt;
    text[size++] = c == decimal_ ? '.' : c;
  }
  return plain_number({text.data(), size});
}

bool is_blank(std::string_view text) {
  return std::all_of(text.begin(), text.end(), [](char c) { return is_blank(c); });
}

std::string_view trim(std::string_view text) {
  while (!text.empty() && is_blank(text.front())) text.remove_prefix(1);
  while (!text.empty() && is_blank(text.back())) text.remove_suffix(1);
  return text;
}

std::string lower(std::string_view text) {
  std::string folded(text);
  for (char& c : folded) c = to_lower(c);
  return folded;
}

std::string fold_word(std::string_view text) {
  std::string folded = lower(text);
  std::erase_if(folded, [](char c) { return c == '.' || c == ' '; });
  return folded;
}

std::optional<PutCall> parse_put_call(std::string_view cell) {
  if (cell.size() > 4) return std::nullopt;
  if (cell == "C" || cell == "c" || cell == "1") return PutCall::call;
  if (cell == "P" || cell == "p" || cell == "0") return PutCall::put;
  const std::string word = lower(cell);
  if (word == "call") return PutCall::call;
  if (word == "put") return PutCall::put;
  return std::nullopt;
}

std::optional<Exercise> parse_exercise(std::string_view cell) {
  if (cell.size() > 8) return std::nullopt;
  const std::string word = lower(cell);
  if (word == "european" || word == "e" || word == "0") return Exercise::european;
  if (word == "american" || word == "a" || word == "1") return Exercise::american;
  return std::nullopt;
}

bool is_name(std::string_view text) {
  const auto is_control = [](char c) {
    const auto byte = static_cast<unsigned char>(c);
    return byte < 0x20 || byte == 0x7F;
  };
  return !text.empty() && text.size() <= kLongestName &&
         std::none_of(text.begin(), text.end(), is_control);
}

}  // namespace duskgrid::quotes
