// A surface in 50 digits, written from the definitions in surface.h and overlay.h and not from
// their code: splines by the recursion of Cox and de Boor, mixtures as prices, volatilities of
// mixtures by Newton's method.
#pragma once

#include <algorithm>
#include <boost/math/constants/constants.hpp>
#include <boost/math/special_functions/erf.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>

#include "surface/surface.h"

namespace duskgrid::surface {

using Wide = boost::multiprecision::cpp_bin_float_50;

inline Wide wide_spline(const std::vector<double>& knots, std::size_t i, int degree,
                        const Wide& k) {
  if (degree == 0) return k >= knots[i] && k < knots[i + 1] ? 1 : 0;
  const std::size_t d = static_cast<std::size_t>(degree);
  const Wide rise = (k - knots[i]) / (Wide(knots[i + d]) - knots[i]);
  const Wide fall = (knots[i + d + 1] - k) / (Wide(knots[i + d + 1]) - knots[i + 1]);
  return rise * wide_spline(knots, i, degree - 1, k) +
         fall * wide_spline(knots, i + 1, degree - 1, k);
}

inline Wide wide_backbone(const SliceParameters& s, const Wide& k) {
  const Wide u = s.psi * k + Wide(s.rho) * s.theta;
  const Wide breadth = Wide(s.theta) * s.theta * (1 - Wide(s.rho) * s.rho);
  return (s.theta + Wide(s.rho) * s.psi * k + sqrt(u * u + breadth)) / 2;
}

inline Wide wide_w(const Slice& slice, const Wide& k) {
  Wide s = sqrt(wide_backbone(slice.backbone, k));
  for (std::size_t i = 0; i < slice.overlay.coefficients.size(); ++i)
    s += slice.overlay.coefficients[i] * wide_spline(slice.overlay.knots, i, 3, k);
  return s * s;
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
  const Slice* early;  // null before the first slice
  const Slice* late;   // null: the early one's backbone, shifted
  Wide share, shift;   // of time; of total variance
  Between rule;
};

inline WideEnds wide_ends(const Surface& surface, const Wide& t) {
  const auto& slices = surface.slices;
  std::size_t next = 0;
  while (next < slices.size() && slices[next].year_fraction < t) ++next;
  if (next == 0) return {nullptr, &slices[0], t / slices[0].year_fraction, 0, Between::variance};
  const Slice& early = slices[next - 1];
  if (next < slices.size())
    return {&early, &slices[next],
            (t - early.year_fraction) / (Wide(slices[next].year_fraction) - early.year_fraction), 0,
            early.to_next};
  const Wide last = early.year_fraction, h = std::max(surface.horizon, early.year_fraction);
  const auto shift_at = [&](const Wide& at) {
    return Wide(early.backbone.theta * (at / last - 1));
  };
  if (t < h) return {&early, nullptr, (t - last) / (h - last), shift_at(h), early.to_next};
  return {nullptr, nullptr, 1, shift_at(t), Between::variance};
}

// Total variance. `near` is the library's, from which a mixture's volatility is refined.
inline Wide wide_w(const Surface& surface, const Wide& k, const Wide& t, double near) {
  const WideEnds ends = wide_ends(surface, t);
  const auto late = [&](const Wide& at) {
    return ends.late ? wide_w(*ends.late, at)
                     : Wide(wide_backbone(surface.slices.back().backbone, at) + ends.shift);
  };
  if (!ends.early) return ends.share * late(k);
  if (ends.rule == Between::variance) {
    const Wide early = wide_w(*ends.early, k);
    return early + ends.share * (late(k) - early);
  }
  const Wide first = wide_w(*ends.early, Wide(0)), last = late(0);
  const auto atm = [](const Wide& w) { return wide_price(0, sqrt(w)); };
  const Wide weight =
      (atm(first + ends.share * (last - first)) - atm(first)) / (atm(last) - atm(first));
  const Wide target = log((1 - weight) * wide_price(k, sqrt(wide_w(*ends.early, k))) +
                          weight * wide_price(k, sqrt(late(k))));
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
