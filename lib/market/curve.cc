#include "market/curve.h"

#include <algorithm>
#include <cmath>

namespace duskgrid::market {

Result<ZeroCurve> ZeroCurve::make(std::vector<ZeroPoint> points) {
  const auto fail = [](const char* what) { return Failure{Fault::configuration, "rates", what}; };
  if (points.empty()) return fail("a curve needs at least one point");
  std::sort(points.begin(), points.end(), [](const ZeroPoint& a, const ZeroPoint& b) {
    return a.year_fraction < b.year_fraction;
  });
  for (std::size_t i = 0; i < points.size(); ++i) {
    if (!(points[i].year_fraction > 0)) return fail("a point is not after the as-of");
    if (!(std::abs(points[i].rate) <= 1))
      return fail("a rate is beyond 100 % (rates are decimals: 0.03 is 3 %)");
    if (i > 0 && points[i].year_fraction == points[i - 1].year_fraction)
      return fail("two points at one time");
  }
  return ZeroCurve(std::move(points));
}

double ZeroCurve::rate(double t) const {
  const auto next =
      std::lower_bound(points_.begin(), points_.end(), t,
                       [](const ZeroPoint& p, double v) { return p.year_fraction < v; });
  if (next == points_.begin()) return next->rate;
  if (next == points_.end()) return points_.back().rate;
  const auto previous = next - 1;
  const double weight =
      (t - previous->year_fraction) / (next->year_fraction - previous->year_fraction);
  return previous->rate + weight * (next->rate - previous->rate);
}

double ZeroCurve::discount_factor(double t) const { return std::exp(-rate(t) * t); }

}  // namespace duskgrid::market
