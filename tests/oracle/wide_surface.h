// A surface in 50 digits, written from the definitions in surface.h and overlay.h and not from
// their code: splines by the recursion of Cox and de Boor, mixtures as prices, volatilities of
// mixtures by Newton's method.
#pragma once

#include <algorithm>
#include <boost/math/constants/constants.hpp>
#include <boost/math/special_functions/erf.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <vector>

#include "surface/surface.h"

namespace duskgrid::surface {

using Wide = boost::multiprecision::cpp_bin_float_50;

inline Wide wide_spline(const std::vector<Wide>& knots, std::size_t i, int degree, const Wide& k) {
  if (degree == 0) return k >= knots[i] && k < knots[i + 1] ? 1 : 0;
  const std::size_t d = static_cast<std::size_t>(degree);
  const Wide rise = (k - knots[i]) / (knots[i + d] - knots[i]);
  const Wide fall = (knots[i + d + 1] - k) / (knots[i + d + 1] - knots[i + 1]);
  return rise * wide_spline(knots, i, degree - 1, k) +
         fall * wide_spline(knots, i + 1, degree - 1, k);
}

// Three mirrored knots at either end; the functions that start there take the coefficient at
// that end.
inline Wide wide_overlay(const Overlay& overlay, const Wide& k) {
  if (overlay.empty()) return 0;
  if (k <= overlay.knots.front()) return overlay.coefficients.front();
  if (k >= overlay.knots.back()) return overlay.coefficients.back();
  std::vector<Wide> knots(overlay.knots.begin(), overlay.knots.end());
  const Wide low = knots.front(), high = knots.back();
  for (std::size_t i = 1; i <= 3; ++i) {
    knots.insert(knots.begin(), 2 * low - overlay.knots[i]);
    knots.push_back(2 * high - overlay.knots[overlay.knots.size() - 1 - i]);
  }
  std::vector<double> c(overlay.coefficients);
  c.insert(c.begin(), 2, c.front());
  c.insert(c.end(), 2, c.back());
  Wide sum = 0;
  for (std::size_t i = 0; i < c.size(); ++i)
    if (k >= knots[i] && k < knots[i + 4]) sum += c[i] * wide_spline(knots, i, 3, k);
  return sum;
}

inline Wide wide_backbone(const SliceParameters& s, const Wide& k) {
  const Wide u = s.psi * k + Wide(s.rho) * s.theta;
  const Wide breadth = Wide(s.theta) * s.theta * (1 - Wide(s.rho) * s.rho);
  return (s.theta + Wide(s.rho) * s.psi * k + sqrt(u * u + breadth)) / 2;
}

inline Wide wide_w(const Slice& slice, const Wide& k) {
  return wide_backbone(slice.backbone, k) + wide_overlay(slice.overlay, k);
}

inline Wide wide_cdf(const Wide& x) {
  return boost::math::erfc(-x / boost::math::constants::root_two<Wide>()) / 2;
}

// Undiscounted, over the forward: the put for k < 0, else the call.
inline Wide wide_price(const Wide& k, const Wide& s) {
  const Wide d1 = -k / s + s / 2, d2 = d1 - s;
  return k < 0 ? Wide(exp(k) * wide_cdf(-d2) - wide_cdf(-d1))
               : Wide(wide_cdf(d1) - exp(k) * wide_cdf(d2));
}

// What stands at either end of the time t, and how far t has gone from one to the other.
struct WideEnds {
  const Slice* early;  // null before the first slice, where the share is of its own time
  const Slice* late;   // null after the last slice
  Wide share;
  Between rule;
};

inline WideEnds wide_ends(const Surface& surface, const Wide& t) {
  const auto& slices = surface.slices;
  std::size_t next = 0;
  while (next < slices.size() && slices[next].year_fraction < t) ++next;
  if (next == 0) return {nullptr, &slices[0], t / slices[0].year_fraction, Between::variance};
  const Slice& early = slices[next - 1];
  if (next == slices.size()) return {&early, nullptr, 0, Between::variance};
  const Slice& late = slices[next];
  return {&early, &late,
          (t - early.year_fraction) / (Wide(late.year_fraction) - early.year_fraction),
          early.to_next};
}

// Total variance. `near` is the library's, from which a mixture's volatility is refined.
inline Wide wide_w(const Surface& surface, const Wide& k, const Wide& t, double near) {
  const WideEnds ends = wide_ends(surface, t);
  if (!ends.late) {
    const Slice& last = *ends.early;
    return wide_w(last, k) + wide_w(last, Wide(0)) * (t / last.year_fraction - 1);
  }
  if (!ends.early) return ends.share * wide_w(*ends.late, k);
  if (ends.rule == Between::variance) {
    const Wide early = wide_w(*ends.early, k);
    return early + ends.share * (wide_w(*ends.late, k) - early);
  }
  const Wide first = wide_w(*ends.early, Wide(0)), last = wide_w(*ends.late, Wide(0));
  const auto atm = [](const Wide& w) { return wide_price(0, sqrt(w)); };
  const Wide weight =
      (atm(first + ends.share * (last - first)) - atm(first)) / (atm(last) - atm(first));
  const Wide target = log((1 - weight) * wide_price(k, sqrt(wide_w(*ends.early, k))) +
                          weight * wide_price(k, sqrt(wide_w(*ends.late, k))));
  // From 13 digits or so each step doubles them.
  Wide s = std::sqrt(near);
  for (int i = 0; i < 4; ++i) {
    const Wide price = wide_price(k, s), d1 = -k / s + s / 2;
    const Wide vega = exp(-d1 * d1 / 2) / boost::math::constants::root_two_pi<Wide>();
    s -= (log(price) - target) * price / vega;
  }
  return s * s;
}

}  // namespace duskgrid::surface
