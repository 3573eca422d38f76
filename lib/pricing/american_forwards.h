// The forward of an expiry with American quotes: call-put parity holds for the European prices
// that have the quotes' volatilities, and these depend on the forward. Both are iterated to
// agreement; there calls and puts near the money imply the same volatility.
#pragma once

#include <optional>
#include <span>

#include "market/parity.h"
#include "pricing/american_slice.h"

namespace duskgrid::pricing {

// One near-the-money pair: what parity says of the quoted prices, and the mids by which the
// premium for early exercise is taken off. A premium is counted for the American sides.
struct ExercisePair {
  market::ParityPair quoted;
  double call_mid, put_mid;  // quote currency
  bool call_american, put_american;
};

struct AmericanForward {
  bool settled;   // the forward agrees with its own premiums to kForwardTolerance of itself
  int rounds;     // of inversions
  double borrow;  // yield on top of the dividends that gives the forward, decimals a year
};
inline constexpr double kForwardTolerance = 1e-7;

// Moves the estimate's forward, with pairs, breaks and bounds, from where parity of the quoted
// prices put it to where that of the European equivalents does. `near` are the pairs used, at least
// one; `terms` has spot, rate, time and dividends, its borrow is not looked at. A pair whose prices
// have no volatility drops out, and is a break where they contradict the forward. Unsettled, and
// the estimate as it was, where none is left, where no borrow gives the forward, or where 40 rounds
// do not agree. A contraction in the forward, by the share of the spot's moves that premiums take
// part in: the secant rule takes 2 to 5 rounds; bisection follows where pairs contradict one
// another.
AmericanForward settle_forward(const DividendInverter& inverter, const ExerciseTerms& terms,
                               std::span<const ExercisePair> near,
                               market::ForwardEstimate& estimate);

// The near pairs with the premiums at the terms' borrow taken off; those with a volatility only.
struct EuropeanPairs {
  std::vector<market::ParityPair> pairs;
  int contradicting = 0;  // left out, one price being less or more than any volatility gives
};
EuropeanPairs european_pairs(const DividendInverter& inverter, const ExerciseTerms& terms,
                             std::span<const ExercisePair> near);

// How many of the near pairs contradict a forward that has the terms' borrow.
int count_breaks(const DividendInverter& inverter, const ExerciseTerms& terms,
                 std::span<const ExercisePair> near, const market::ForwardEstimate& estimate);

}  // namespace duskgrid::pricing
