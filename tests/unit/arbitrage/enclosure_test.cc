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

// Knots mirrored past the ends, three a side.
std::vector<double> with_mirrored(const std::vector<double>& knots) {
  std::vector<double> out;
  for (std::size_t i = 3; i > 0; --i) out.push_back(2 * knots.front() - knots[i]);
  out.insert(out.end(), knots.begin(), knots.end());
  for (std::size_t i = 1; i <= 3; ++i)
    out.push_back(2 * knots.back() - knots[knots.size() - 1 - i]);
  return out;
}

// Coefficients of all the functions alive between the knots.
std::vector<double> with_repeated(const std::vector<double>& coefficients) {
  std::vector<double> out = coefficients;
  out.insert(out.begin(), 2, coefficients.front());
  out.insert(out.end(), 2, coefficients.back());
  return out;
}

TEST(Enclosure, PiecesOfTheOverlayHoldItsValuesIn50Digits) {
  Random random(18);
  for (int trial = 0; trial < 100; ++trial) {
    Overlay o;
    double k = uniform(random, -1, 1);
    const int knots = 6 + trial % 12;
    for (int i = 0; i < knots; ++i) o.knots.push_back(k += log_uniform(random, 1e-6, 0.3));
    for (int i = 0; i < knots - 2; ++i) o.coefficients.push_back(uniform(random, -0.1, 0.1));
    const auto all_knots = with_mirrored(o.knots), all = with_repeated(o.coefficients);
    for (const Cubic& piece : pieces_of(o)) {
      const double low = std::lerp(piece.start, piece.end, uniform(random, 0, 0.9));
      const Affine range = Affine::range(low, std::lerp(low, piece.end, uniform(random, 0, 0.99)));
      const Form u = overlay_over(piece, range);
      for (const double xi : {-0.99, -0.3, 0.0, 0.6, 0.99}) {
        const Exact at = Exact(range.c) + Exact(range.d) * xi;
        if (at < piece.start || at >= piece.end) continue;
        Exact value = 0, slope = 0, bend = 0;
        for (std::size_t i = 0; i < all.size(); ++i) {
          value += all[i] * b_spline(all_knots, i, 3, at);
          slope += all[i] * b_spline_slope(all_knots, i, 3, at);
          bend += all[i] * b_spline_bend(all_knots, i, at);
        }
        EXPECT_TRUE(contains(u.w, xi, value)) << trial;
        EXPECT_TRUE(contains(u.slope, xi, slope)) << trial;
        EXPECT_TRUE(contains(u.bend, xi, bend)) << trial;
      }
    }
  }
}

// Of what the library evaluates the pieces are the proof: at both ends of each, where its value is
// a constant beyond the first and last, to the rounding of its recursion.
TEST(Enclosure, PiecesJoinAndEndWithTheConstantsOfTheOverlay) {
  Random random(22);
  constexpr double kRounding = 1e-13;  // some 50 operations on values of 0.1, over gaps of 0.1
  for (int trial = 0; trial < 50; ++trial) {
    Overlay o;
    for (int i = 0; i < 6 + trial % 5; ++i)
      o.knots.push_back(0.1 * i + uniform(random, -0.02, 0.02));
    for (std::size_t i = 0; i + 2 < o.knots.size(); ++i)
      o.coefficients.push_back(uniform(random, -0.1, 0.1));
    const auto pieces = pieces_of(o);
    for (std::size_t i = 0; i <= pieces.size(); ++i) {
      const double k = o.knots[i];
      const auto at = surface::overlay_at(o, k);
      const auto check = [&](const Cubic& piece) {
        const Form u = overlay_over(piece, k);
        EXPECT_NEAR(u.w.c, at.u, kRounding);
        EXPECT_NEAR(u.slope.c, at.du_dk, 100 * kRounding);
        EXPECT_NEAR(u.bend.c, at.d2u_dk2, 1e4 * kRounding);
      };
      if (i < pieces.size()) check(pieces[i]);
      if (i > 0) check(pieces[i - 1]);
    }
    EXPECT_EQ(surface::overlay_at(o, o.knots.front() - 1).u, o.coefficients.front());
    EXPECT_EQ(surface::overlay_at(o, o.knots.back() + 1).u, o.coefficients.back());
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

Exact exact_w(const RawSlice& s, const Exact& k) {
  const Exact d = k - s.m;
  return s.a + s.b * (s.rho * d + sqrt(d * d + Exact(s.sigma) * s.sigma));
}

TEST(Enclosure, WhatIsPastTheSlopeOfAWingHoldsIn50Digits) {
  Random random(23);
  for (int trial = 0; trial < 1000; ++trial) {
    const RawSlice s{uniform(random, -0.01, 0.1), trial % 10 == 9 ? 0 : uniform(random, 0.01, 1),
                     uniform(random, -0.99, 0.99), uniform(random, -1, 1),
                     log_uniform(random, 1e-3, 1)};
    const bool left = trial % 2;
    const Hyperbola h = left ? Hyperbola::of(s).mirrored() : Hyperbola::of(s);
    const double from = log_uniform(random, 1e-9, 1);
    const Affine y = Affine::range(from, from + log_uniform(random, 1e-9, 1));
    const Affine past = h.past_slope(y);
    if (!std::isfinite(past.e)) continue;
    for (const double xi : {-1.0, -0.4, 0.0, 0.7, 1.0}) {
      const Exact k = 1 / (Exact(y.c) + Exact(y.d) * xi);
      const Exact slope = Exact(s.b) * (1 + (left ? -1 : 1) * Exact(s.rho));
      EXPECT_TRUE(contains(past, xi, exact_w(s, left ? Exact(-k) : k) - slope * k)) << trial;
    }
  }
}

// Also of slices that agree to their last digits.
TEST(Enclosure, StepsFromOneHyperbolaToAnotherHoldIn50Digits) {
  Random random(24);
  for (int trial = 0; trial < 1000; ++trial) {
    const double apart = trial % 2 ? log_uniform(random, 1e-15, 1e-3) : uniform(random, 0, 1);
    const auto near = [&](double x) { return x * (1 + apart * uniform(random, 0, 0.1)); };
    const RawSlice a{0.01, uniform(random, 0.01, 1), uniform(random, -0.9, 0.9),
                     uniform(random, -1, 1), log_uniform(random, 1e-3, 1)};
    const RawSlice b{near(a.a), near(a.b), near(a.rho), near(a.m), near(a.sigma)};
    const double from = uniform(random, -2, 2);
    const Affine k = Affine::range(from, from + log_uniform(random, 1e-6, 1));
    const Affine step = step_at(Hyperbola::of(a), Hyperbola::of(b), k);
    if (!std::isfinite(step.e)) continue;
    for (const double xi : {-1.0, -0.4, 0.0, 0.7, 1.0}) {
      const Exact at = Exact(k.c) + Exact(k.d) * xi;
      EXPECT_TRUE(contains(step, xi, exact_w(b, at) - exact_w(a, at))) << trial;
    }
  }
}

}  // namespace
}  // namespace duskgrid::arbitrage
