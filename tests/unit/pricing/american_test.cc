#include "pricing/american.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kInfinity = std::numeric_limits<double>::infinity();
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
constexpr double kAccuracy = 1e-8;  // of a strike of 100: what american.h promises
constexpr double kExtreme = 5e-7;   // the same for rates or volatilities out of the ordinary
const AmericanEngine kEngine;

double european(const AmericanTerms& t, double vol) {
  return black_price({t.put_call, t.spot * std::exp((t.rate - t.carry_yield) * t.year_fraction),
                      t.strike, std::exp(-t.rate * t.year_fraction)},
                     vol * std::sqrt(t.year_fraction));
}

TEST(GaussLegendre, IntegratesPolynomialsOfTwiceItsPointsLessOne) {
  for (const std::size_t n : {std::size_t{1}, std::size_t{5}, std::size_t{24}, std::size_t{49}}) {
    const auto rule = gauss_legendre(n);
    double sum = 0, top = 0;
    for (std::size_t i = 0; i < n; ++i) {
      sum += rule.weights[i];
      top += rule.weights[i] * std::pow(rule.nodes[i], static_cast<double>(2 * n - 2));
    }
    // Rounding of n terms and of the power.
    EXPECT_NEAR(sum, 2, 1e-13) << n;
    EXPECT_NEAR(top, 2 / static_cast<double>(2 * n - 1), 1e-13) << n;
  }
}

TEST(AgeRules, IntegrateRootsAtBothEndsOfTime) {
  // int_0^1 sqrt(v) sqrt(1-v) dv = pi/8; the weights hold one sqrt(v) less.
  for (const auto& rule : {premium_rule(8, 24), double_exponential_premium_rule(24, 121)}) {
    double sum = 0;
    for (std::size_t k = 0; k < rule.points; ++k)
      sum += rule.weight[k] * rule.root_age[k] * rule.root_age[k] * rule.root_left[k];
    EXPECT_NEAR(sum, std::acos(-1.0) / 8, 1e-12);
  }
}

TEST(AgeRules, InterpolateASquareOfTheRootExactly) {
  const auto rule = collocation_rule(8, 12);
  for (std::size_t k = 0; k < rule.ages.points; ++k) {
    double square = 0;
    for (std::size_t j = 0; j < 8; ++j)
      square += rule.ages.interpolation[8 * k + j] * rule.root[j] * rule.root[j];
    EXPECT_NEAR(square, rule.ages.root_left[k] * rule.ages.root_left[k], 1e-14);
  }
}

TEST(ExerciseKind, FollowsTheSignsOfRateAndYield) {
  EXPECT_EQ(exercise_kind(PutCall::put, 0.05, 0.02), ExerciseKind::one_side);
  EXPECT_EQ(exercise_kind(PutCall::put, 0.05, -0.02), ExerciseKind::one_side);
  EXPECT_EQ(exercise_kind(PutCall::put, 0, -0.02), ExerciseKind::one_side);
  EXPECT_EQ(exercise_kind(PutCall::put, 0, 0), ExerciseKind::never);
  EXPECT_EQ(exercise_kind(PutCall::put, -0.01, 0), ExerciseKind::never);
  EXPECT_EQ(exercise_kind(PutCall::put, -0.01, -0.02), ExerciseKind::between);
  EXPECT_EQ(exercise_kind(PutCall::call, 0.05, 0), ExerciseKind::never);
  EXPECT_EQ(exercise_kind(PutCall::call, 0.05, -0.01), ExerciseKind::never);
  EXPECT_EQ(exercise_kind(PutCall::call, -0.05, -0.01), ExerciseKind::between);
  EXPECT_EQ(exercise_kind(PutCall::call, 0.05, 0.01), ExerciseKind::one_side);
}

TEST(AmericanEngine, WithoutReasonToExerciseThePriceIsEuropeanToTheBit) {
  const AmericanTerms calls[] = {{PutCall::call, 100, 90, 0.05, 0, 1},
                                 {PutCall::call, 100, 120, 0.05, -0.03, 2},
                                 {PutCall::put, 100, 110, 0, 0, 1},
                                 {PutCall::put, 100, 110, -0.02, 0.01, 3}};
  for (const auto& t : calls)
    for (const double vol : {0.0, 0.05, 0.3, 2.0}) {
      const auto p = kEngine.price(t, vol);
      ASSERT_EQ(p.status, AmericanStatus::ok);
      EXPECT_EQ(p.price, european(t, vol));
      EXPECT_EQ(p.european, p.price);
      EXPECT_FALSE(p.immediate);
      EXPECT_EQ(p.exercise_spot, t.put_call == PutCall::put ? 0 : kInfinity);
    }
}

TEST(AmericanEngine, PastTheBoundaryThePriceIsIntrinsic) {
  const auto put = kEngine.price({PutCall::put, 60, 100, 0.08, 0, 1}, 0.2);
  EXPECT_TRUE(put.immediate);
  EXPECT_EQ(put.price, 40);
  EXPECT_GT(put.exercise_spot, 60);
  const auto call = kEngine.price({PutCall::call, 180, 100, 0.01, 0.08, 1}, 0.2);
  EXPECT_TRUE(call.immediate);
  EXPECT_EQ(call.price, 80);
  EXPECT_LT(call.exercise_spot, 180);
}

TEST(AmericanEngine, AtTheBoundaryThePriceAndItsSlopePasteSmoothly) {
  const AmericanTerms at{PutCall::put, 100, 100, 0.06, 0.02, 0.7};
  const double boundary = kEngine.price(at, 0.3).exercise_spot;
  for (const double above : {1e-6, 1e-4, 1e-2}) {
    AmericanTerms t = at;
    t.spot = boundary * (1 + above);
    const double over = kEngine.price(t, 0.3).price - (100 - t.spot);
    // Gamma at the boundary is 2 (r K - q B) / (sigma B)^2; over is half of it times the distance
    // squared, and what the third order adds, a share of about the distance.
    const double gamma = 2 * (0.06 * 100 - 0.02 * boundary) / std::pow(0.3 * boundary, 2);
    const double wanted = 0.5 * gamma * std::pow(boundary * above, 2);
    EXPECT_NEAR(over, wanted, above * wanted + kAccuracy) << above;
  }
}

TEST(AmericanEngine, AtExpiryThePriceIsIntrinsic) {
  EXPECT_EQ(kEngine.price({PutCall::put, 90, 100, 0.05, 0, 0}, 0.3).price, 10);
  EXPECT_EQ(kEngine.price({PutCall::put, 110, 100, 0.05, 0, 0}, 0.3).price, 0);
  EXPECT_NEAR(kEngine.price({PutCall::put, 90, 100, 0.05, 0, 1e-9}, 0.3).price, 10, kAccuracy);
}

TEST(AmericanEngine, WithoutVolatilityThePriceIsTheBestTimeToExercise) {
  // A put on a spot that falls: q S e^{-qv} = r K e^{-rv} at v = ln(q S / r K) / (q - r).
  const AmericanTerms t{PutCall::put, 100, 90, 0.02, 0.08, 40};
  const double at = std::log(0.08 * 100 / (0.02 * 90)) / 0.06;
  const double best = 90 * std::exp(-0.02 * at) - 100 * std::exp(-0.08 * at);
  EXPECT_NEAR(american_floor(t), best, 1e-12);
  EXPECT_NEAR(kEngine.price(t, 0).price, best, 1e-12);
  // Steps of ever smaller width, and both switches on the way; convexity is of the order of s^2.
  double last = best;
  for (double vol = 1e-7; vol < 0.05; vol *= 1.3) {
    const double price = kEngine.price(t, vol).price;
    EXPECT_GE(price, last - kAccuracy) << vol;
    EXPECT_NEAR(price, best, 40 * 90 * vol * vol + kAccuracy) << vol;
    last = price;
  }
}

TEST(AmericanEngine, NearZeroVolatilityThePriceIsItsFloor) {
  for (const double strike : {80.0, 99.0, 101.0, 130.0})
    for (const double yield : {0.0, 0.02, 0.05}) {
      const AmericanTerms t{PutCall::put, 100, strike, 0.05, yield, 1};
      for (const double vol : {1e-9, 1e-6, 1e-5}) {
        const auto p = kEngine.price(t, vol);
        ASSERT_EQ(p.status, AmericanStatus::ok) << strike << ' ' << yield << ' ' << vol;
        // An at-the-money price of 0.4 s F bounds what volatility can add.
        EXPECT_NEAR(p.price, american_floor(t), 40 * vol + kAccuracy) << strike << ' ' << yield;
      }
    }
}

TEST(AmericanEngine, WithGreatVolatilityThePriceNearsItsCeiling) {
  const AmericanTerms put{PutCall::put, 100, 80, 0.05, 0.02, 1};
  const AmericanTerms call{PutCall::call, 100, 80, 0.05, 0.02, 1};
  for (const double vol : {50.0, 1e3, 1e8}) {  // as 2 r t / s^2 ln(s^2)
    EXPECT_NEAR(kEngine.price(put, vol).price, american_ceiling(put), 100 / vol) << vol;
    EXPECT_NEAR(kEngine.price(call, vol).price, american_ceiling(call), 100 / vol) << vol;
    EXPECT_LE(kEngine.price(put, vol).price, american_ceiling(put)) << vol;
  }
  EXPECT_EQ(kEngine.price({PutCall::put, 100, 80, 0, -0.02, 1}, 50).price, 80);
  // The perpetual put takes over at 16.
  EXPECT_NEAR(kEngine.price(put, 16 - 1e-9).price, kEngine.price(put, 16 + 1e-9).price, kExtreme);
}

TEST(AmericanEngine, StrongDriftMakesThePutPerpetualContinuously) {
  // The switch is at (r - q - sigma^2 / 2) t = 9 s; on either side of it the same price.
  const double vol = 0.01, rate = 0.09 + 0.5 * vol * vol;
  const double below = kEngine.price({PutCall::put, 100, 100, rate - 1e-9, 0, 1}, vol).price;
  const double above = kEngine.price({PutCall::put, 100, 100, rate + 1e-9, 0, 1}, vol).price;
  EXPECT_NEAR(below, above, kExtreme);
}

TEST(AmericanEngine, MoreNodesMoveThePriceByTheAccuracyPromised) {
  AmericanAccuracy finer;
  finer.boundary_nodes = 40;
  finer.boundary_points = 80;
  finer.premium_points = 201;
  const AmericanEngine fine(finer);
  for (const double yield : {-0.02, 0.0, 0.03, 0.05, 0.09})
    for (const double vol : {0.05, 0.2, 0.6})
      for (const double spot : {80.0, 95.0, 100.0, 120.0}) {
        const AmericanTerms t{PutCall::put, spot, 100, 0.05, yield, 1.5};
        EXPECT_NEAR(kEngine.price(t, vol).price, fine.price(t, vol).price, kAccuracy)
            << yield << ' ' << vol << ' ' << spot;
      }
}

TEST(AmericanEngine, TwoBoundariesAreRefusedByName) {
  const auto p = kEngine.price({PutCall::put, 100, 100, -0.01, -0.05, 1}, 0.2);
  EXPECT_EQ(p.status, AmericanStatus::two_boundaries);
  EXPECT_EQ(p.price, 0);
  EXPECT_EQ(word(p.status), "two boundaries");
}

TEST(AmericanEngine, UnsoundTermsAreNotFiniteAndNeverNaN) {
  const AmericanTerms good{PutCall::put, 100, 100, 0.05, 0.02, 1};
  EXPECT_EQ(kEngine.price(good, -0.1).status, AmericanStatus::not_finite);
  EXPECT_EQ(kEngine.price(good, kNaN).status, AmericanStatus::not_finite);
  EXPECT_EQ(kEngine.price(good, kInfinity).status, AmericanStatus::not_finite);
  for (double AmericanTerms::*field :
       {&AmericanTerms::spot, &AmericanTerms::strike, &AmericanTerms::rate,
        &AmericanTerms::carry_yield, &AmericanTerms::year_fraction})
    for (const double bad : {kNaN, kInfinity, -kInfinity, 1e300}) {
      AmericanTerms t = good;
      t.*field = bad;
      const auto p = kEngine.price(t, 0.2);
      EXPECT_FALSE(std::isnan(p.price));
      EXPECT_FALSE(std::isnan(p.european));
      EXPECT_FALSE(std::isnan(p.exercise_spot));
    }
}

}  // namespace
}  // namespace duskgrid::pricing
