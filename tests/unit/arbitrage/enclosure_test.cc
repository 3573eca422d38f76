#include "arbitrage/enclosure.h"

#include <gtest/gtest.h>

#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <random>

namespace duskgrid::arbitrage {
namespace {

using surface::Overlay;
using Random = std::mt19937_64;

double uniform(Random& random, double low, double high) {
  return std::uniform_real_distribution<double>(low, high)(random);
}

double log_uniform(Random& random, double low, double high) {
  return std::exp(uniform(random, std::log(low), std::log(high)));
}

using Exact = boost::multiprecision::cpp_bin_float_50;

// The recursion of Cox and de Boor, from its definition.
Exact b_spline(const std::vector<double>& t, std::size_t i, int degree, const Exact& k) {
  if (degree == 0) return k >= t[i] && k < t[i + 1] ? 1 : 0;
  const auto d = static_cast<std::size_t>(degree);
  return (k - t[i]) / (Exact(t[i + d]) - t[i]) * b_spline(t, i, degree - 1, k) +
         (t[i + d + 1] - k) / (Exact(t[i + d + 1]) - t[i + 1]) * b_spline(t, i + 1, degree - 1, k);
}

// Of its derivative, from the derivatives of its factors.
Exact b_spline_slope(const std::vector<double>& t, std::size_t i, int degree, const Exact& k) {
  const auto d = static_cast<std::size_t>(degree);
  return degree * (b_spline(t, i, degree - 1, k) / (Exact(t[i + d]) - t[i]) -
                   b_spline(t, i + 1, degree - 1, k) / (Exact(t[i + d + 1]) - t[i + 1]));
}

Exact b_spline_bend(const std::vector<double>& t, std::size_t i, const Exact& k) {
  return 3 * (b_spline_slope(t, i, 2, k) / (Exact(t[i + 3]) - t[i]) -
              b_spline_slope(t, i + 1, 2, k) / (Exact(t[i + 4]) - t[i + 1]));
}

bool contains(const Affine& a, double xi, const Exact& value) {
  return abs(value - (Exact(a.c) + Exact(a.d) * xi)) <= a.e;
}

TEST(Enclosure, PiecesOfTheOverlayHoldItsValuesIn50Digits) {
  Random random(18);
  for (int trial = 0; trial < 100; ++trial) {
    Overlay o;
    double k = uniform(random, -1, 1);
    const int knots = 5 + trial % 12;
    for (int i = 0; i < knots; ++i) o.knots.push_back(k += log_uniform(random, 1e-6, 0.3));
    for (int i = 0; i < knots - 4; ++i) o.coefficients.push_back(uniform(random, -0.1, 0.1));
    for (const Cubic& piece : pieces_of(o)) {
      const double low = std::lerp(piece.start, piece.end, uniform(random, 0, 0.9));
      const Affine range = Affine::range(low, std::lerp(low, piece.end, uniform(random, 0, 0.99)));
      const VolForm u = overlay_over(piece, range);
      for (const double xi : {-0.99, -0.3, 0.0, 0.6, 0.99}) {
        const Exact at = Exact(range.c) + Exact(range.d) * xi;
        if (at < piece.start || at >= piece.end) continue;
        Exact value = 0, slope = 0, bend = 0;
        for (std::size_t i = 0; i < o.coefficients.size(); ++i) {
          value += o.coefficients[i] * b_spline(o.knots, i, 3, at);
          slope += o.coefficients[i] * b_spline_slope(o.knots, i, 3, at);
          bend += o.coefficients[i] * b_spline_bend(o.knots, i, at);
        }
        EXPECT_TRUE(contains(u.s, xi, value)) << trial;
        EXPECT_TRUE(contains(u.slope, xi, slope)) << trial;
        EXPECT_TRUE(contains(u.bend, xi, bend)) << trial;
      }
    }
  }
}

// w of a hyperbola in 50 digits, and its derivatives by the same formula written out for raw SVI.
TEST(Enclosure, HyperbolasHoldTheirValuesIn50Digits) {
  Random random(19);
  for (int trial = 0; trial < 2000; ++trial) {
    const RawSlice s{uniform(random, -0.01, 0.1), uniform(random, 0.01, 1),
                     uniform(random, -0.99, 0.99), uniform(random, -1, 1),
                     log_uniform(random, 1e-3, 1)};
    const double from = uniform(random, 0.1, 3), to = from + log_uniform(random, 1e-6, 1);
    const bool left = trial % 2;
    const Hyperbola h = left ? Hyperbola::of(s).mirrored() : Hyperbola::of(s);
    const Affine range = Affine::range(from, to);
    const Form near = h.at(range), tail = h.tail(range);
    for (const double xi : {-1.0, -0.4, 0.0, 0.7, 1.0}) {
      const Exact place = Exact(range.c) + Exact(range.d) * xi;
      const auto check = [&](const Exact& size, const Form& form, const Exact& unit) {
        const Exact k = left ? Exact(-size) : size, d = k - s.m;
        const Exact root = sqrt(d * d + Exact(s.sigma) * s.sigma);
        const Exact w = s.a + s.b * (s.rho * d + root);
        const Exact slope = (left ? -1 : 1) * s.b * (s.rho + d / root);
        const Exact bend = s.b * Exact(s.sigma) * s.sigma / (root * root * root);
        if (std::isfinite(form.w.e)) {
          EXPECT_TRUE(contains(form.w, xi, w * unit)) << trial;
        }
        if (std::isfinite(form.slope.e)) {
          EXPECT_TRUE(contains(form.slope, xi, slope)) << trial;
        }
        if (std::isfinite(form.bend.e)) {
          EXPECT_TRUE(contains(form.bend, xi, bend)) << trial;
        }
      };
      check(place, near, 1);
      check(1 / place, tail, place);
    }
  }
}

}  // namespace
}  // namespace duskgrid::arbitrage
