#include "surface/overlay.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <array>
#include <boost/math/special_functions/cardinal_b_spline.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <iostream>
#include <limits>

namespace duskgrid::surface {
namespace {

using Wide = boost::multiprecision::cpp_bin_float_50;
using Limits = std::numeric_limits<double>;

// Three levels of a recursion with two products, a quotient and a sum each, and four products and
// sums at its end. In units of the largest coefficient (over the narrowest width for a slope, times
// 6 over its square for a curvature).
constexpr double kHandful = 16 * Limits::epsilon();

const std::vector<double> kUneven{-0.61, -0.4, -0.35, -0.2, -0.17, 0.02, 0.05, 0.3, 0.31};
const std::vector<double> kCoefficients{0.002, -0.003, 0.001, 0.004, -0.001, 0.0005, 0.003};
const Overlay kOverlay{kUneven, kCoefficients};

double least_width(const std::vector<double>& knots) {
  double least = Limits::max();
  for (std::size_t i = 1; i < knots.size(); ++i) least = std::min(least, knots[i] - knots[i - 1]);
  return least;
}

// Inside every interval, at the knots, beside them, and beyond the ends.
std::vector<double> places(const std::vector<double>& knots) {
  std::vector<double> out{knots.front() - 3, knots.back() + 3};
  for (const double knot : knots)
    out.insert(out.end(), {std::nextafter(knot, -9), knot, std::nextafter(knot, 9)});
  for (std::size_t i = 1; i < knots.size(); ++i)
    for (const double share : {0.1, 0.37, 0.5, 0.8})
      out.push_back(std::lerp(knots[i - 1], knots[i], share));
  return out;
}

TEST(BasisAt, FunctionsAreNotNegativeAndSumToOneAndTheirDerivativesToZero) {
  const double width = least_width(kUneven);
  for (const double k : places(kUneven)) {
    const BasisPoint basis = basis_at(kUneven, k);
    ASSERT_GE(basis.first, 0);
    ASSERT_LE(basis.first + 4, static_cast<std::ptrdiff_t>(kCoefficients.size()));
    double value = 0, slope = 0, curvature = 0;
    for (std::size_t r = 0; r < 4; ++r) {
      EXPECT_GE(basis.value[r], 0) << k;
      value += basis.value[r];
      slope += basis.slope[r];
      curvature += basis.curvature[r];
    }
    EXPECT_NEAR(value, 1, kHandful) << k;
    EXPECT_NEAR(slope, 0, kHandful / width) << k;
    EXPECT_NEAR(curvature, 0, kHandful / (width * width)) << k;
  }
}

TEST(BasisAt, EachCoefficientIsInForceSomewhere) {
  std::vector<double> most(kCoefficients.size());
  for (const double k : places(kUneven)) {
    const BasisPoint basis = basis_at(kUneven, k);
    for (std::size_t r = 0; r < 4; ++r) {
      double& so_far = most[static_cast<std::size_t>(basis.first) + r];
      so_far = std::max(so_far, basis.value[r]);
    }
  }
  for (const double value : most) EXPECT_GT(value, 0.3);
}

TEST(OverlayAt, IsTheEndCoefficientAtAndBeyondTheEndKnots) {
  for (const double k : {-1e300, -5.0, -0.7, std::nextafter(-0.61, -1), -0.61}) {
    const OverlayPoint p = overlay_at(kOverlay, k);
    EXPECT_EQ(p.u, kCoefficients.front()) << k;
    EXPECT_EQ(p.du_dk, 0) << k;
    EXPECT_EQ(p.d2u_dk2, 0) << k;
  }
  for (const double k : {0.31, std::nextafter(0.31, 1), 0.4, 5.0, 1e300}) {
    const OverlayPoint p = overlay_at(kOverlay, k);
    EXPECT_EQ(p.u, kCoefficients.back()) << k;
    EXPECT_EQ(p.du_dk, 0) << k;
    EXPECT_EQ(p.d2u_dk2, 0) << k;
  }
}

TEST(OverlayAt, EqualCoefficientsAreAConstantAndNoneAreNothing) {
  const Overlay level{kUneven, std::vector<double>(7, 0.003)};
  for (const double k : places(kUneven)) {
    EXPECT_NEAR(overlay_at(level, k).u, 0.003, 0.003 * kHandful) << k;
    EXPECT_EQ(overlay_at({}, k).u, 0);
    EXPECT_EQ(overlay_at({}, k).d2u_dk2, 0);
  }
}

// What a jump would be is told from the change over two ulp of k, which is that of the next
// derivative: of the third one no more than 6 times the coefficients over the widths cubed.
TEST(OverlayAt, HasTwoContinuousDerivativesAcrossEveryKnotAndAtBothEnds) {
  const double width = least_width(kUneven), most = 0.004;
  for (const double knot : kUneven) {
    const OverlayPoint before = overlay_at(kOverlay, std::nextafter(knot, -9)),
                       at = overlay_at(kOverlay, knot),
                       after = overlay_at(kOverlay, std::nextafter(knot, 9));
    for (const OverlayPoint& beside : {before, after}) {
      EXPECT_NEAR(beside.u, at.u, most * kHandful) << knot;
      EXPECT_NEAR(beside.du_dk, at.du_dk, most * kHandful / width) << knot;
      EXPECT_NEAR(beside.d2u_dk2, at.d2u_dk2, 6 * most * kHandful / std::pow(width, 3)) << knot;
    }
  }
}

// The definition: (t_i+4 - t_i) times the divided difference over t_i .. t_i+4 of (t - k)_+^3.
Wide wide_function(const std::vector<Wide>& t, std::size_t i, const Wide& k) {
  std::array<Wide, 5> difference;
  for (std::size_t j = 0; j < 5; ++j) {
    const Wide over = t[i + j] > k ? Wide(t[i + j] - k) : Wide(0);
    difference[j] = over * over * over;
  }
  for (std::size_t order = 1; order < 5; ++order)
    for (std::size_t j = 4; j >= order; --j)
      difference[j] = (difference[j] - difference[j - 1]) / (t[i + j] - t[i + j - order]);
  return (t[i + 4] - t[i]) * difference[4];
}

// Three more knots at either end, and the end coefficients three times. Where those knots lie
// cancels, hence not where the library has them.
Wide wide_overlay(const Overlay& overlay, const Wide& k) {
  const auto& knots = overlay.knots;
  const std::size_t n = knots.size();
  std::vector<Wide> t;
  for (const int i : {3, 2, 1}) t.push_back(Wide(knots.front()) - Wide(i) / 7);
  t.insert(t.end(), knots.begin(), knots.end());
  for (const int i : {1, 2, 3}) t.push_back(Wide(knots.back()) + Wide(i) / 5);
  Wide sum = 0;
  for (std::size_t i = 0; i < n + 2; ++i) {
    const std::size_t c = std::clamp<std::size_t>(i, 2, n - 1) - 2;
    sum += overlay.coefficients[c] * wide_function(t, i, k);
  }
  return sum;
}

TEST(OverlayAt, AgreesWithDividedDifferencesInFiftyDigits) {
  // Within an interval u is a cubic: the second difference is exact, the first misses by a sixth of
  // the squared step times u''', some 1e-34 of it. Rounding: 1e-50 over the squared step, 1e-16 of
  // the coefficients' curvature over the widths squared, which is 1e4.
  const Wide h = 1e-17;
  const double width = least_width(kUneven), most = 0.004;
  double worst = 0;
  for (std::size_t i = 1; i < kUneven.size(); ++i)
    for (const double share : {1e-6, 0.1, 0.37, 0.5, 0.8, 1 - 1e-6}) {
      const double k = std::lerp(kUneven[i - 1], kUneven[i], share);
      const OverlayPoint p = overlay_at(kOverlay, k);
      const Wide up = wide_overlay(kOverlay, k + h), at = wide_overlay(kOverlay, k),
                 down = wide_overlay(kOverlay, k - h);
      const double misses[3] = {
          (p.u - static_cast<double>(at)) / most,
          (p.du_dk - static_cast<double>((up - down) / (2 * h))) / (most / width),
          (p.d2u_dk2 - static_cast<double>((up - 2 * at + down) / (h * h))) /
              (6 * most / width / width)};
      for (const double miss : misses) {
        EXPECT_LT(std::abs(miss), kHandful) << k;
        worst = std::max(worst, std::abs(miss));
      }
    }
  std::cout << "worst error " << worst / Limits::epsilon() << " eps\n";
}

TEST(OverlayAt, OnEvenKnotsAgreesWithTheCardinalSplinesOfBoost) {
  // Powers of two, so that the knots are exact.
  const double width = 0.0625;
  std::vector<double> knots;
  for (int i = 0; i < 9; ++i) knots.push_back(-0.3125 + width * i);
  const Overlay overlay{knots, kCoefficients};
  using boost::math::cardinal_b_spline, boost::math::cardinal_b_spline_prime,
      boost::math::cardinal_b_spline_double_prime;
  for (const double k : places(knots)) {
    if (k < knots.front() || k > knots.back()) continue;
    double u = 0, slope = 0, curvature = 0;
    for (int i = 0; i < 11; ++i) {  // the middle of function i is at knot i - 1
      const double x = (k - knots[0]) / width - (i - 1);
      const double c = kCoefficients[static_cast<std::size_t>(std::clamp(i - 2, 0, 6))];
      u += c * cardinal_b_spline<3>(x);
      slope += c * cardinal_b_spline_prime<3>(x) / width;
      curvature += c * cardinal_b_spline_double_prime<3>(x) / (width * width);
    }
    const OverlayPoint p = overlay_at(overlay, k);
    EXPECT_NEAR(p.u, u, 0.004 * kHandful) << k;
    EXPECT_NEAR(p.du_dk, slope, 0.004 * kHandful / width) << k;
    EXPECT_NEAR(p.d2u_dk2, curvature, 6 * 0.004 * kHandful / (width * width)) << k;
  }
}

// The worked number of docs/formats.md: knots -0.5, -0.3, -0.1, 0.1, 0.3, 0.5.
TEST(OverlayAt, WorkedNumberOfTheManual) {
  const Overlay overlay{{-0.5, -0.3, -0.1, 0.1, 0.3, 0.5}, {0.001, 0.002, 0, 0.003}};
  // At a knot, (1, 4, 1)/6 of the coefficients about it; half way, (1, 23, 23, 1)/48.
  EXPECT_NEAR(overlay_at(overlay, -0.1).u, 0.009 / 6, 1e-17);
  EXPECT_NEAR(overlay_at(overlay, 0).u, 0.05 / 48, 1e-17);
}

TEST(OverlayProblem, WhatIsNoOverlayIsSaid) {
  EXPECT_FALSE(Overlay{}.problem());
  EXPECT_FALSE(kOverlay.problem());
  const auto with = [](auto change) {
    Overlay overlay = kOverlay;
    change(overlay);
    return overlay.problem().has_value();
  };
  EXPECT_TRUE(with([](Overlay& o) { o.coefficients.pop_back(); }));
  EXPECT_TRUE(with([](Overlay& o) { o.coefficients.push_back(0); }));
  EXPECT_TRUE(with([](Overlay& o) { o.coefficients.clear(); }));
  EXPECT_TRUE(with([](Overlay& o) { o.knots.clear(); }));
  EXPECT_TRUE(with([](Overlay& o) { o = {{0, 1, 2, 3, 4}, {1, 1, 1}}; }));
  EXPECT_TRUE(with([](Overlay& o) { o.knots[4] = o.knots[3]; }));
  EXPECT_TRUE(with([](Overlay& o) { std::swap(o.knots[4], o.knots[3]); }));
  EXPECT_TRUE(with([](Overlay& o) { o.knots.back() = Limits::infinity(); }));
  EXPECT_TRUE(with([](Overlay& o) { o.knots.front() = Limits::quiet_NaN(); }));
  EXPECT_TRUE(with([](Overlay& o) { o.coefficients[2] = Limits::quiet_NaN(); }));
}

}  // namespace
}  // namespace duskgrid::surface
