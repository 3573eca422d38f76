#include "quotes/osi.h"

#include <algorithm>
#include <cmath>
#include <cstdio>

namespace duskgrid::quotes {
namespace {

constexpr std::size_t kRootWidth = 6;
constexpr std::size_t kTailWidth = 15;  // yymmdd, C or P, 8 digits of strike
constexpr double kLargestThousandths = 99'999'999;

bool is_digit(char c) { return c >= '0' && c <= '9'; }
bool is_letter(char c) { return (c >= 'A' && c <= 'Z') || (c >= 'a' && c <= 'z'); }

// The digits as a number, -1 when one of them is not a digit.
int number(std::string_view digits) {
  int value = 0;
  for (const char c : digits) {
    if (!is_digit(c)) return -1;
    value = 10 * value + (c - '0');
  }
  return value;
}

// The root without its padding; empty when it is malformed. Padding is all or nothing:
// a half-padded root is more likely a cell cut at the wrong place.
std::string_view read_root(std::string_view padded) {
  const std::string_view root = padded.substr(0, padded.find(' '));
  const bool rest_is_padding = padded.find_first_not_of(' ', root.size()) == std::string_view::npos;
  const bool width_fits = root.size() == padded.size() || padded.size() == kRootWidth;
  const bool sound =
      std::all_of(root.begin(), root.end(), [](char c) { return is_digit(c) || is_letter(c); });
  const bool good = rest_is_padding && width_fits && sound && root.size() <= kRootWidth;
  return good ? root : std::string_view{};
}

std::chrono::year_month_day read_date(std::string_view yymmdd) {
  const int yy = number(yymmdd.substr(0, 2));
  const int mm = number(yymmdd.substr(2, 2));
  const int dd = number(yymmdd.substr(4, 2));
  if (yy < 0 || mm < 0 || dd < 0) return {};  // month 0: not ok()
  return {std::chrono::year{2000 + yy}, std::chrono::month{static_cast<unsigned>(mm)},
          std::chrono::day{static_cast<unsigned>(dd)}};
}

}  // namespace

std::optional<OsiSymbol> parse_osi(std::string_view text) {
  if (text.size() <= kTailWidth || text.size() > kRootWidth + kTailWidth) return std::nullopt;
  const std::string_view root = read_root(text.substr(0, text.size() - kTailWidth));
  const std::string_view tail = text.substr(text.size() - kTailWidth);
  const std::chrono::year_month_day expiry = read_date(tail.substr(0, 6));
  const char side = tail[6];
  const int thousandths = number(tail.substr(7));
  if (root.empty() || !expiry.ok() || thousandths < 0) return std::nullopt;
  if (side != 'C' && side != 'P') return std::nullopt;
  return OsiSymbol{std::string(root), expiry, side == 'C' ? PutCall::call : PutCall::put,
                   thousandths / 1000.0, is_digit(root.back())};
}

std::string format_osi(const OsiSymbol& symbol) {
  const int year = static_cast<int>(symbol.expiry.year());
  const double thousandths = std::round(symbol.strike * 1000);
  const bool holds = year >= 2000 && year <= 2099 && symbol.expiry.ok() && thousandths >= 0 &&
                     thousandths <= kLargestThousandths;
  if (!holds) return {};
  char text[64];
  std::snprintf(text, sizeof text, "%-6.6s%02d%02u%02u%c%08d", symbol.root.c_str(), year - 2000,
                static_cast<unsigned>(symbol.expiry.month()),
                static_cast<unsigned>(symbol.expiry.day()),
                symbol.put_call == PutCall::call ? 'C' : 'P', static_cast<int>(thousandths));
  return text;
}

}  // namespace duskgrid::quotes
