// Static arbitrage that could be traded at the quotes: buying at the ask, selling at the
// bid. Simple closed forms over few legs; not the linear program over all of them.
#pragma once

#include <span>
#include <vector>

#include "arbitrage/violation.h"

namespace duskgrid::arbitrage {

// Firm sides at one strike, quote currency; NaN where there is none.
struct QuotedStrike {
  double strike;
  double call_bid, call_ask;
  double put_bid, put_ask;
};

struct QuotedSlice {
  quotes::Instant expiry;
  double year_fraction;  // > 0
  double forward;        // quote currency
  double discount_factor;
  bool american = false;  // early exercise: only the breaks that hold for it are looked for
  std::vector<QuotedStrike> strikes;  // increasing
};

// Every break larger than `tolerance` (a fraction of the forward; rounding of decimal prices in
// binary is below 1e-12). Adjacent strikes and expiries first; a wider combination
// only where no adjacent one lies within it.
// - bounds: a call below D (F - K) or above D F, a put below D (K - F) or above D K
// - vertical: a price that rises (call) or falls (put) with strike, or by more than D dK
// - butterfly: a middle strike above the line between its neighbours
// - calendar: C/(D F) at equal K/F lower for the later expiry, against the line between its
//   strikes (Gatheral & Jacquier 2014, lemma 2.1); American: at equal strike
// - parity: call minus put outside D (F - K)
// - box: two strikes whose parity intervals contradict one another
// O(n log n) in quotes a slice, quadratic in slices.
std::vector<Violation> check_quotes(std::span<const QuotedSlice> slices, double tolerance = 1e-10);

}  // namespace duskgrid::arbitrage
