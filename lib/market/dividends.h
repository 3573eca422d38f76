// Dividends of one underlying, and the forward of a spot that pays them.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string_view>
#include <vector>

#include "quotes/quote.h"

namespace duskgrid::market {

enum class DividendKind : std::uint8_t { cash, proportional };
std::string_view word(DividendKind kind);

// As stated: from `ex` on the spot trades without it.
struct DatedDividend {
  quotes::Instant ex;
  DividendKind kind;
  double amount;  // quote currency a share, >= 0; or a share of the spot, in [0, 1)
  bool operator==(const DatedDividend&) const = default;
};

// The same as seen from an as-of.
struct Dividend {
  double time;  // of going ex, years from now; outside (0, year_fraction) without effect
  DividendKind kind;
  double amount;
};

// Those that go ex after `from`, by time.
std::vector<Dividend> dividends_after(quotes::Instant from, std::span<const DatedDividend> dated);
// How many of them have gone ex before `year_fraction`.
std::size_t count_before(std::span<const Dividend> dividends, double year_fraction);

// What moves a spot until one expiry. Rates are continuous, decimals a year: the zero rate to the
// expiry, and the yield earned by holding the spot on top of the dividends (what is paid for
// borrowing it).
struct Financing {
  double spot;  // quote currency, > 0
  double rate;
  double borrow;
  double year_fraction;  // > 0
};

// F = S e^{(r - b) T} prod(1 - p_i) - sum of each D_i carried to T, less the proportional dividends
// that follow it: what it costs to buy the spot now and to deliver it at expiry. Dividends are by
// time. Not above 0 where they are worth more than the spot; that a spot may fall below a dividend
// would raise the forward a little, and is left out.
double forward_of(const Financing& financing, std::span<const Dividend> dividends);
// The borrow b that gives a forward, or nothing: none within +-kMostBorrow does.
inline constexpr double kMostBorrow = 5;
std::optional<double> borrow_of(double forward, const Financing& financing,
                                std::span<const Dividend> dividends);

}  // namespace duskgrid::market
