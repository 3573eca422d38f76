// expiries.csv: a line an expiry of a night, with what tells it from the night before. Header only
// for what it holds; reading it back: past_run.h.
#pragma once

#include <cstdint>
#include <string>
#include <string_view>

#include "quotes/quote.h"

namespace duskgrid::publish {

// What tells the quotes of one expiry from others: the same prints, the same quotes.
struct ExpiryPrint {
  quotes::Instant expiry;
  std::string print;  // hexadecimal
};

struct ExpiryRow {
  quotes::Instant expiry;
  std::int64_t quotes;  // contracts read, those that cannot be read aside
  std::int64_t used, inside;
  double rms_vol;     // of vol_fit - vol_mid over used quotes, decimals a year; kAbsent without any
  std::string print;  // first 16 digits of the SHA-256 of strikes, sides, bids and asks
};

inline constexpr std::string_view kExpiriesHeader =
    "underlying,expiry,quotes,used,inside,rms_vol,quotes_print\n";

}  // namespace duskgrid::publish
