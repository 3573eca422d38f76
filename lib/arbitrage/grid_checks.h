// Arbitrage in a grid of volatilities taken as prices at which one could trade: what a
// risk system would be exposed to, whoever made the grid.
#pragma once

#include <span>
#include <vector>

#include "arbitrage/violation.h"

namespace duskgrid::arbitrage {

struct VolNode {
  double strike;  // quote currency, > 0
  double vol;     // decimals a year, > 0
};

struct VolSlice {
  quotes::Instant expiry;
  double year_fraction;        // > 0
  double forward;              // quote currency, > 0
  double discount_factor;      // > 0
  std::vector<VolNode> nodes;  // by strike, increasing
};

// Prices every node as a call with no spread and looks for bounds, vertical, butterfly and calendar
// breaks larger than `tolerance`, a fraction of the forward. Slices by year_fraction,
// increasing. A vol printed with d decimals is off by 10^-d / 2, which is worth up to
// 0.4 sqrt(t) of that as a fraction of the forward: allow for it in the tolerance.
std::vector<Violation> check_grid(std::span<const VolSlice> slices, double tolerance);

}  // namespace duskgrid::arbitrage
