// The readable quotes of a table grouped by underlying and expiry.
#pragma once

#include <cstdint>
#include <vector>

#include "quotes/quote.h"

namespace duskgrid::quotes {

struct ChainSlice {
  Instant expiry;
  std::vector<std::uint32_t> rows;  // indices into QuoteTable::quotes, by strike, call before put
};

struct Chain {
  std::int32_t underlying;         // index into QuoteTable::underlyings
  std::vector<ChainSlice> slices;  // by expiry
  std::int64_t read = 0;  // contracts read under this name, unreadable ones with a name included
};

// One chain for every underlying named, in the order of their names (bytes), whatever the order of
// rows. Unreadable and duplicate quotes are in no slice; quotes dropped for other
// reasons are. O(n log n).
std::vector<Chain> group_chains(const QuoteTable& table);

}  // namespace duskgrid::quotes
