// The worked examples of J. Gatheral, A. Jacquier, "Arbitrage-free SVI volatility surfaces",
// Quantitative Finance 14(1) (2014) 59-71, arXiv 1204.0646: example 3.1 (A. Vogt's slice, whose
// density goes negative) and example 5.1 (its two repairs). Parameters are printed there; values of
// w and g are recomputed from them with ten and more digits.
#include <gtest/gtest.h>

#include <cmath>

#include "surface/backbone.h"

namespace duskgrid::surface {
namespace {

// Eq. 3.1: w = a + b (rho (k - m) + sqrt((k - m)^2 + sigma^2)).
struct RawSlice {
  double a, b, m, rho, sigma;
};

SmilePoint point_of(const RawSlice& s, double k) {
  const double d = k - s.m, root = std::sqrt(d * d + s.sigma * s.sigma);
  return {s.a + s.b * (s.rho * d + root), s.b * (s.rho + d / root),
          s.b * s.sigma * s.sigma / (root * root * root)};
}

double g(const RawSlice& s, double k) { return durrleman(point_of(s, k), k); }

constexpr RawSlice kVogt{-0.0410, 0.1331, 0.3586, 0.3060, 0.4153};
constexpr RawSlice kGuaranteed{0.0077409, 0.0692420, 0.0420338, -0.3340365, 0.1186080};
constexpr RawSlice kOptimal{-0.0305199, 0.1027168, 0.2723442, 0.1007176, 0.4123981};

// Ten decimals are printed of w and g.
constexpr double kTenDecimals = 0.6e-10;

struct Least {
  double k, g;
};

Least least(const RawSlice& s) {
  Least out{0, g(s, 0)};
  for (int i = -30000; i <= 30000; ++i)
    if (const double k = 1e-4 * i; g(s, k) < out.g) out = {k, g(s, k)};
  return out;
}

TEST(VogtSlice, TotalVariancesAgree) {
  EXPECT_NEAR(point_of(kVogt, -1.5).w, 0.1367819611, kTenDecimals);
  EXPECT_NEAR(point_of(kVogt, 0.5).w, 0.0231515656, kTenDecimals);
  EXPECT_NEAR(point_of(kVogt, 1.5).w, 0.1671516999, kTenDecimals);
}

TEST(VogtSlice, DurrlemansFunctionAgrees) {
  EXPECT_NEAR(g(kVogt, -1.5), 0.2478306953, kTenDecimals);
  EXPECT_NEAR(g(kVogt, 0), 1.0386497313, kTenDecimals);
  EXPECT_NEAR(g(kVogt, 0.8), -0.0298184615, kTenDecimals);
}

TEST(VogtSlice, DensityIsNegativeOnTheKnownIntervalAndNowhereElse) {
  constexpr double kFourDecimals = 1e-4;  // of the interval's ends, as printed, and one scan step
  double first = 10, last = -10;
  int sign_changes = 0;
  for (int i = -30000; i <= 30000; ++i) {
    const double k = 1e-4 * i;
    if (i > -30000) sign_changes += (g(kVogt, k) < 0) != (g(kVogt, k - 1e-4) < 0);
    if (g(kVogt, k) >= 0) continue;
    first = std::min(first, k);
    last = std::max(last, k);
  }
  EXPECT_NEAR(first, 0.6425, kFourDecimals);
  EXPECT_NEAR(last, 1.2570, kFourDecimals);
  EXPECT_EQ(sign_changes, 2);
}

TEST(VogtSlice, LeastValueAndItsPlaceAgree) {
  const Least l = least(kVogt);
  constexpr double kSixDecimals = 0.6e-6;
  EXPECT_NEAR(l.g, -0.032864, kSixDecimals);
  // The bottom is flat (g'' near 1.2): 0.001 off in k is what six decimals of g can tell.
  EXPECT_NEAR(l.k, 0.8795, 1e-3);
}

// The jump-wing numbers of the example, t = 1, from the raw ones.
TEST(VogtSlice, MoneyVarianceIsTheExamplesV) {
  EXPECT_NEAR(point_of(kVogt, 0).w, 0.01742625, 0.6e-8);
  EXPECT_NEAR(point_of(kVogt, 0).dw_dk / (2 * std::sqrt(0.01742625)), -0.1752111, 0.6e-7);
}

TEST(VogtSlice, GuaranteedRepairIsFreeAndKeepsMoneyVarianceAndSkew) {
  EXPECT_GT(least(kGuaranteed).g, 0);
  // Raw parameters printed to 7 decimals.
  constexpr double kPrinted = 2e-7;
  EXPECT_NEAR(point_of(kGuaranteed, 0).w, 0.01742625, kPrinted);
  EXPECT_NEAR(point_of(kGuaranteed, 0).dw_dk / (2 * std::sqrt(0.01742625)), -0.1752111,
              10 * kPrinted);
}

TEST(VogtSlice, OptimalRepairIsFreeWithItsLeastWhereItIsKnown) {
  const Least l = least(kOptimal);
  EXPECT_NEAR(l.g, 0.008118, 1e-5);  // raw parameters of 7 decimals, g bends them tenfold or so
  // The same flat bottom as above: 0.001 off in k changes g by less than the 1e-5 it is known to.
  EXPECT_NEAR(l.k, 0.8115, 1e-3);
}

// Eq. 4.1 is eq. 3.1 with other letters: a = theta (1 - rho^2)/2, b = psi/2, m = -rho theta/psi,
// sigma = theta sqrt(1 - rho^2)/psi.
TEST(SurfaceSlice, IsTheRawSliceOfTheSamePaper) {
  const SliceParameters s{0.04, -0.6, 0.3};
  const RawSlice raw{s.theta * (1 - s.rho * s.rho) / 2, s.psi / 2, -s.rho * s.theta / s.psi, s.rho,
                     s.theta * std::sqrt(1 - s.rho * s.rho) / s.psi};
  constexpr double kRounding = 1e-13;  // sums of terms of order 1 with cancellation of ten or so
  for (double k = -2; k <= 2; k += 0.125) {
    const SmilePoint a = smile_at(s, k), b = point_of(raw, k);
    EXPECT_NEAR(a.w, b.w, kRounding) << k;
    EXPECT_NEAR(a.dw_dk, b.dw_dk, kRounding) << k;
    EXPECT_NEAR(a.d2w_dk2, b.d2w_dk2, 10 * kRounding) << k;
  }
}

}  // namespace
}  // namespace duskgrid::surface
