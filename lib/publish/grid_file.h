// Reading a grid of volatilities back from CSV, ours or another's.
#pragma once

#include <string>
#include <vector>

#include "arbitrage/grid_checks.h"
#include "quotes/instants.h"
#include "quotes/result.h"

namespace duskgrid::publish {

struct ReadGrid {
  std::string underlying;
  std::vector<arbitrage::VolSlice> slices;  // by time, listed expiries and tenors alike
};

struct GridFile {
  quotes::Clock clock;          // of the first as_of or expiry that states an offset
  std::vector<ReadGrid> grids;  // by underlying
};

// Needs columns strike, vol and forward, and year_fraction or both as_of and expiry; takes
// underlying, expiry and discount_factor (else 1) where there. Failure: no_input for a missing
// file, not_quotes with the line for anything that is not such a grid (two vols at one node, or two
// forwards at one time, among them).
Result<GridFile> read_grid(const std::string& path);

}  // namespace duskgrid::publish
