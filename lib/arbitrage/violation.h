// One arbitrage found, as a trade: what to buy and sell, and what it locks in.
#pragma once

#include <cstdint>
#include <limits>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/instants.h"
#include "quotes/quote.h"

namespace duskgrid::arbitrage {

enum class Scope : std::uint8_t { quotes, surface };
enum class Kind : std::uint8_t { bounds, vertical, butterfly, calendar, parity, box, wing };
std::string_view word(Scope scope);
std::string_view word(Kind kind);

enum class LegType : std::uint8_t { call, put, forward };

struct Leg {
  double quantity;  // plus buys, minus sells
  LegType type;
  double strike;  // of a forward: the agreed price
  quotes::Instant expiry;
  double price;  // paid or received now per unit, quote currency; 0 for a forward
  double half_spread = std::numeric_limits<double>::quiet_NaN();    // of the price, if two-sided
  double year_fraction = std::numeric_limits<double>::quiet_NaN();  // stands in for no expiry
};

struct Violation {
  Scope scope;
  Kind kind;
  quotes::Instant expiry;
  quotes::Instant expiry_2 = quotes::kNoInstant;  // of calendar violations
  std::vector<double> strikes;  // one to three, increasing (of the calendar: early, then late)
  double amount;                // present value locked in per unit of the legs, > 0, quote currency
  double vol_points;    // the amount over the vega of the sold leg, in 0.01 of vol; NaN if none
  double half_spreads;  // the amount over the legs' half-spreads together; NaN if unknown
  std::vector<Leg> legs;
};

// "+0.4 C 95 2031-06-20 @6.10; -1 C 100 2031-06-20 @3.90": plus buys at the ask, minus sells at
// the bid; F for a forward, whose @ is the price agreed. A leg without an expiry has its year
// fraction: "-1 C 100 t=0.25 @11.92".
std::string format_legs(const std::vector<Leg>& legs, const quotes::Clock& clock);

}  // namespace duskgrid::arbitrage
