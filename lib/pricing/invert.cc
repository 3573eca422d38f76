#include "pricing/invert.h"

#include <array>
#include <cmath>

#include "pricing/invert_kernel-inl.h"

namespace duskgrid::pricing {
namespace {

namespace kernel = HWY_NAMESPACE;
namespace hn = hwy::HWY_NAMESPACE;
using OneLane = hn::CappedTag<double, 1>;

}  // namespace

std::string_view word(VolStatus status) {
  constexpr std::array<std::string_view, 4> kWords{"ok", "below intrinsic", "above bound",
                                                   "not finite"};
  return kWords[static_cast<std::size_t>(status)];
}

double invert_normalised(double x, double beta) {
  const OneLane d;
  return hn::GetLane(
      kernel::invert(d, hn::Set(d, x), hn::Set(d, beta), hn::Set(d, std::exp(0.5 * x))));
}

ImpliedVol implied_vol(const BlackTerms& o, double price, double year_fraction) {
  const auto positive = [](double v) { return std::isfinite(v) && v > 0; };
  if (!positive(o.forward) || !positive(o.discount_factor) || !positive(year_fraction))
    return {VolStatus::not_finite, 0};
  const OneLane d;
  const kernel::Shared<OneLane> shared(d, o.forward, o.discount_factor, year_fraction);
  auto status = hn::Zero(d);
  const auto sign = hn::Set(d, o.put_call == quotes::PutCall::call ? 1.0 : -1.0);
  const auto vol =
      kernel::invert_prices(d, shared, hn::Set(d, o.strike), sign, hn::Set(d, price), status);
  return {static_cast<VolStatus>(static_cast<int>(hn::GetLane(status))), hn::GetLane(vol)};
}

}  // namespace duskgrid::pricing
