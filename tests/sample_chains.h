// Chains to fit in tests and benchmarks: an invented index, and the used quotes of a published run.
#pragma once

#include <filesystem>
#include <vector>

#include "surface/fit.h"

namespace duskgrid::samples {

using Chain = std::vector<surface::FitSlice>;

// An index on ticks of 0.05 at a forward of 5000: mixtures of three lognormals, which no three
// numbers a slice follow and which are free of arbitrage; a fortnight to two years out, one slice
// at three months. Quotes are as even in strike as their bids allow, each with its own place in its
// spread.
Chain index_chain(int slices, int quotes);

// The used quotes of the underlying with the most of them, from ledger.csv and forwards.csv of a
// run folder (docs/formats.md). The ledger has no mid volatility; the middle of the two sides
// stands for it, which moves no spread. Throws when a file cannot be read.
Chain published_chain(const std::filesystem::path& folder);

}  // namespace duskgrid::samples
