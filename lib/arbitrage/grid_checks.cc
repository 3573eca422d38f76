#include "arbitrage/grid_checks.h"

#include <cmath>

#include "arbitrage/quote_checks.h"
#include "pricing/black.h"

namespace duskgrid::arbitrage {
namespace {

QuotedSlice priced(const VolSlice& slice) {
  QuotedSlice out{
      slice.expiry, slice.year_fraction, slice.forward, slice.discount_factor, false, {}};
  for (const auto& node : slice.nodes) {
    const double call = pricing::black_price(
        {quotes::PutCall::call, slice.forward, node.strike, slice.discount_factor},
        node.vol * std::sqrt(slice.year_fraction));
    out.strikes.push_back({node.strike, call, call, quotes::kAbsent, quotes::kAbsent});
  }
  return out;
}

}  // namespace

std::vector<Violation> check_grid(std::span<const VolSlice> slices, double tolerance) {
  std::vector<QuotedSlice> quoted;
  for (const auto& slice : slices) quoted.push_back(priced(slice));
  auto violations = check_quotes(quoted, tolerance);
  for (auto& v : violations) v.scope = Scope::surface;
  return violations;
}

}  // namespace duskgrid::arbitrage
