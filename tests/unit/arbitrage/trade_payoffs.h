// What a trade locks in, worked out from its legs alone: the check on what quote_checks.h says of
// it.
#pragma once

#include <algorithm>
#include <cmath>
#include <limits>
#include <vector>

#include "arbitrage/quote_checks.h"

namespace duskgrid::arbitrage {

inline double cost(const Violation& v) {
  double sum = 0;
  for (const Leg& leg : v.legs) sum += leg.quantity * leg.price;
  return sum;
}

inline double leg_payoff(const Leg& leg, double spot) {
  switch (leg.type) {
    case LegType::call: return leg.quantity * std::max(0.0, spot - leg.strike);
    case LegType::put: return leg.quantity * std::max(0.0, leg.strike - spot);
    case LegType::forward: return leg.quantity * (spot - leg.strike);
  }
  return std::numeric_limits<double>::quiet_NaN();
}

// Least payoff of legs of one expiry: piecewise linear, so at zero, at a strike, or falling
// forever.
inline double least_payoff(const std::vector<Leg>& legs) {
  std::vector<double> corners{0};
  for (const Leg& leg : legs) corners.push_back(leg.strike);
  const double far = 10 * *std::max_element(corners.begin(), corners.end());
  corners.push_back(far);
  corners.push_back(2 * far);
  double least = std::numeric_limits<double>::infinity(), payoff_far = 0;
  for (const double spot : corners) {
    double payoff = 0;
    for (const Leg& leg : legs) payoff += leg_payoff(leg, spot);
    if (spot == far) payoff_far = payoff;
    if (spot == 2 * far && payoff < payoff_far - 1e-9 * far)
      return -std::numeric_limits<double>::infinity();
    least = std::min(least, payoff);
  }
  return least;
}

// What the trade locks in, worked out from its legs alone: the credit, and the discounted least
// payoff (negative where the seller of a spread can owe its width).
inline double locked_in(const Violation& v, const QuotedSlice& slice) {
  const double discount = slice.american ? 1 : slice.discount_factor;
  return -cost(v) + discount * least_payoff(v.legs);
}

// Calendar: at the early expiry each late leg is worth no less than its intrinsic there, whatever
// the volatility, its forward being the early spot grown by the ratio of the forwards.
inline double locked_in_calendar(const Violation& v, const QuotedSlice& early,
                                 const QuotedSlice& late) {
  const double growth = early.american ? 1 : late.forward / early.forward;
  const double discount = early.american ? 1 : late.discount_factor / early.discount_factor;
  std::vector<Leg> at_early;
  for (Leg leg : v.legs) {
    if (leg.expiry == late.expiry) {
      leg.strike /= growth;
      leg.quantity *= discount * growth;
    }
    at_early.push_back(leg);
  }
  // Quantities round, so the far end may fall or rise by that much: looked at up to three times the
  // forward.
  double least = 0;
  for (int i = 0; i <= 3000; ++i) {
    double payoff = 0;
    for (const Leg& leg : at_early) payoff += leg_payoff(leg, early.forward * i / 1000);
    least = std::min(least, payoff);
  }
  return -cost(v) + (early.american ? 1 : early.discount_factor) * least;
}

}  // namespace duskgrid::arbitrage
