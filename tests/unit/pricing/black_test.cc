#include "pricing/black.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr double kInfinity = std::numeric_limits<double>::infinity();
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// A price is a product of five rounded factors, each of condition at most (x/s)^2 <= 16 here:
// relative.
constexpr double kPrice = 100 * kEps;

TEST(ScaledErfc, ZeroIsOne) { EXPECT_EQ(scaled_erfc(0.0), 1.0); }

TEST(ScaledErfc, BranchesMeetAtTheirEnds) {
  for (const double edge : {0.46875, 4.0}) {
    const double below = scaled_erfc(edge), above = scaled_erfc(std::nextafter(edge, kInfinity));
    EXPECT_NEAR(below, above, 4 * kEps * below) << edge;  // the accuracy the header promises
  }
}

TEST(ScaledErfc, LargeArgumentsFallAsTheReciprocal) {
  // exp(x^2) erfc(x) = (1 - 1/(2 x^2) + ...) / (x sqrt pi): Abramowitz & Stegun 7.1.23.
  EXPECT_NEAR(scaled_erfc(1e10), 0.56418958354775628695 / 1e10, 4 * kEps * 1e-10);
  EXPECT_GT(scaled_erfc(1e300), 0.0);
}

TEST(ScaledErfc, VeryNegativeIsInfinite) {
  EXPECT_EQ(scaled_erfc(-27.0), kInfinity);
  EXPECT_TRUE(std::isfinite(scaled_erfc(-26.0)));
}

TEST(ScaledErfc, NaNStaysNaN) { EXPECT_TRUE(std::isnan(scaled_erfc(kNaN))); }

TEST(NormalCdf, TailsAndCentre) {
  EXPECT_EQ(normal_cdf(0.0), 0.5);
  EXPECT_EQ(normal_cdf(kInfinity), 1.0);
  EXPECT_EQ(normal_cdf(-kInfinity), 0.0);
  EXPECT_GT(normal_cdf(-38.0), 0.0);  // a subnormal, not zero
}

TEST(LogMoneyness, NearlyEqualStrikesKeepTheirDigits) {
  // A power of two, so that the forward is exact.
  const double strike = 4096, forward = strike * (1 + 0x1p-40);
  // ln(1 + e) = e - e^2/2 + ..., the next term far below an ulp.
  EXPECT_NEAR(log_moneyness_of_forward(forward, strike), 0x1p-40 - 0x1p-81, 2 * kEps * 0x1p-40);
}

TEST(LogMoneyness, FarStrikesDoNotOverflow) {
  EXPECT_NEAR(log_moneyness_of_forward(1e300, 1e-300), 600 * std::log(10.0), 600 * 4 * kEps);
  EXPECT_EQ(log_moneyness_of_forward(100, 100), 0.0);
}

TEST(NormalisedPrice, ZeroVolatilityIsWorthNothing) { EXPECT_EQ(normalised_price(-0.1, 0.0), 0.0); }

TEST(NormalisedPrice, HugeVolatilityReachesTheBound) {
  EXPECT_DOUBLE_EQ(normalised_price(-0.5, 100.0), std::exp(-0.25));
  EXPECT_GE(normalised_gap(-0.5, 100.0), 0.0);
}

TEST(NormalisedPrice, PriceAndGapAddUpToTheBound) {
  for (const double x : {0.0, -0.01, -0.5, -3.0, -20.0})
    for (const double s : {0.01, 0.2, 1.0, 3.0, 10.0}) {
      const double bound = std::exp(0.5 * x);
      // Two sums of terms no larger than the bound, each of condition 1 + (x/2)^2 in the exponent.
      EXPECT_NEAR(normalised_price(x, s) + normalised_gap(x, s), bound,
                  8 * kEps * (1 + 0.25 * x * x) * bound)
          << x << ' ' << s;
    }
}

TEST(NormalisedPrice, GrowsWithVolatilityAcrossEveryBranch) {
  for (const double x : {0.0, -1e-6, -0.3, -0.999, -1.001, -5.0}) {
    double previous = 0;
    for (double s = 0.02; s < 12; s *= 1.01) {
      const double price = normalised_price(x, s);
      EXPECT_GE(price, previous) << x << ' ' << s;
      previous = price;
    }
  }
}

TEST(NormalisedVega, IsTheSlopeOfThePrice) {
  for (const double x : {0.0, -0.2, -1.5})
    for (const double s : {0.1, 0.39, 0.41, 2.0}) {
      const double h = 1e-5 * s;
      const double slope = (normalised_price(x, s + h) - normalised_price(x, s - h)) / (2 * h);
      // Central difference: truncation h^2 b'''/6 ~ 1e-10 s^2 b''' plus rounding b eps / h.
      EXPECT_NEAR(slope, normalised_vega(x, s), 1e-6 * normalised_vega(x, s) + 1e-14)
          << x << ' ' << s;
    }
}

TEST(BlackPrice, CallMinusPutIsTheDiscountedForward) {
  for (const double strike : {50.0, 99.0, 100.0, 101.0, 180.0}) {
    const double call = black_price({PutCall::call, 100, strike, 0.97}, 0.3);
    const double put = black_price({PutCall::put, 100, strike, 0.97}, 0.3);
    EXPECT_NEAR(call - put, 0.97 * (100 - strike), 100 * kPrice) << strike;
  }
}

TEST(BlackPrice, ZeroVolatilityIsIntrinsic) {
  EXPECT_EQ(black_price({PutCall::call, 100, 90, 0.5}, 0), 5.0);
  EXPECT_EQ(black_price({PutCall::put, 100, 90, 0.5}, 0), 0.0);
}

TEST(BlackPrice, ScalesWithMoney) {
  const double one = black_price({PutCall::call, 1, 1.1, 0.9}, 0.25);
  for (const double unit : {1e-8, 100.0, 1e12})
    EXPECT_NEAR(black_price({PutCall::call, unit, 1.1 * unit, 0.9}, 0.25), unit * one,
                kPrice * unit * one);
}

TEST(BlackPrice, StaysBetweenItsBounds) {
  for (const auto side : {PutCall::call, PutCall::put})
    for (const double strike : {1e-3, 60.0, 100.0, 250.0, 1e6})
      for (const double s : {1e-6, 0.1, 1.0, 8.0, 60.0}) {
        const BlackTerms terms{side, 100, strike, 0.95};
        const double price = black_price(terms, s);
        EXPECT_GE(price, discounted_intrinsic(terms)) << strike << ' ' << s;
        EXPECT_LE(price, upper_bound(terms) * (1 + kPrice)) << strike << ' ' << s;
      }
}

TEST(BlackGreeks, AreTheDerivativesOfThePrice) {
  constexpr double t = 0.5, vol = 0.3;
  const double s = vol * std::sqrt(t);
  for (const auto side : {PutCall::call, PutCall::put})
    for (const double strike : {80.0, 100.0, 125.0}) {
      const Greeks greeks = black_greeks({side, 100, strike, 0.96}, vol, t);
      const auto price = [&](double forward, double total) {
        return black_price({side, forward, strike, 0.96}, total);
      };
      // Central differences, step 1e-4 relative: truncation near 1e-8, rounding near 1e-12 / step.
      constexpr double kFirst = 1e-6, kSecond = 1e-5, kStep = 0.01, kVolStep = 1e-4;
      EXPECT_NEAR((price(100 + kStep, s) - price(100 - kStep, s)) / (2 * kStep), greeks.delta,
                  kFirst);
      EXPECT_NEAR(
          (price(100 + kStep, s) - 2 * price(100, s) + price(100 - kStep, s)) / (kStep * kStep),
          greeks.gamma, kSecond);
      EXPECT_NEAR(
          (price(100, s + kVolStep) - price(100, s - kVolStep)) / (2 * kVolStep) * std::sqrt(t),
          greeks.vega, 100 * kFirst);
    }
}

}  // namespace
}  // namespace duskgrid::pricing
