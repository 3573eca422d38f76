// Judging quotes one by one, before any model: expired, one-sided, crossed, wide,
// repeated, stale, non-standard. What needs a forward is judged in pricing/selection.h.
#pragma once

#include <optional>
#include <string>

#include "quotes/quote.h"

namespace duskgrid::quotes {

struct CleanOptions {
  // Shortest time to expiry that is fitted, hours. Range: >= 0. Larger drops
  // same-day expiries.
  double shortest_hours = 1.0;
  // Largest spread as a multiple of the mid. Range: > 0. Smaller drops more of the
  // cheap wings, where a spread of once the mid is ordinary.
  double widest = 1.5;
  // Oldest quote time before the as-of, hours; 0 keeps every age. Only rows that
  // state a quote time are judged.
  double stale_hours = 24.0;
  std::optional<std::string> problem() const;
};

// Sets `reason` (and `note` where the words help) on each readable quote, first rule
// that applies: expired, too-short, stale, non-standard, duplicate, no-bid, no-ask,
// crossed, wide. Of a repeated contract (underlying, expiry, strike, put_call) the
// one kept is the latest quote time, then the narrowest sound spread, then the highest
// bid, then the lowest ask, then the lowest file and line; independent of row order up
// to identical rows. Quotes that have a reason already are left alone and compete with
// none. A multiplier is odd when it differs from the one most rows of its underlying
// state (of equally common ones the smaller is the ordinary one). O(n log n).
void clean_quotes(QuoteTable& table, Instant as_of, const CleanOptions& options);

}  // namespace duskgrid::quotes
