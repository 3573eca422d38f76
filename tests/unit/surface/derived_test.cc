#include "surface/derived.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <numbers>
#include <vector>

namespace duskgrid::surface {
namespace {

using quotes::PutCall;
using Limits = std::numeric_limits<double>;

// A handful of products, a logarithm and an exponential of numbers of order 1: relative.
constexpr double kRounding = 1e-14;

Surface flat(double vol) {
  const double w = vol * vol * 0.5;
  return {"HALYRD", 100, {{quotes::Instant{}, 0.5, 102, 0.98, {w, 0, 0}, -0.3, 0.3}}};
}

Surface curved() {
  Surface s{"HALYRD",
            100,
            {{quotes::Instant{}, 0.25, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2},
             {quotes::Instant{}, 0.75, 103, 0.97, {0.03, -0.4, 0.25}, -0.5, 0.3}}};
  s.slices[1].overlay = {{-0.5, -0.3, -0.1, 0, 0.1, 0.3}, {0.001, 0.0005, 0.0008, 0.0006}};
  return s;
}

TEST(LogDensity, OfAFlatSmileIsNormalAboutMinusHalfTheVariance) {
  const Surface s = flat(0.2);
  for (const double k : {-0.4, -0.1, 0.0, 0.05, 0.3}) {
    const double w = 0.02, z = (k + 0.5 * w) / std::sqrt(w);
    const double expected = std::exp(-0.5 * z * z) / std::sqrt(2 * std::numbers::pi * w);
    EXPECT_NEAR(log_density(point_at(s, k, 0.5), k).value() / expected, 1, 10 * kRounding) << k;
  }
}

TEST(LogDensity, IsZeroWhereItUnderflowsAndNegativeWhereTheSmileHasAButterfly) {
  EXPECT_EQ(log_density({0.01, 0, 0, 0.01}, 50), 0.0);
  EXPECT_LT(log_density({0.04, 0, -4, 0.04}, 0).value(), 0);
}

TEST(LogDensity, IsNothingWithoutAPositiveVariance) {
  for (const double w : {0.0, -0.01, Limits::quiet_NaN(), Limits::infinity()})
    EXPECT_EQ(log_density({w, 0, 0, 0}, 0.1), std::nullopt) << w;
  EXPECT_EQ(log_density({0.01, Limits::quiet_NaN(), 0, 0}, 0.1), std::nullopt);
}

TEST(LocalVariance, OfAFlatSmileIsItsVarianceAtEveryTime) {
  const Surface s = flat(0.2);
  for (const double t : {0.001, 0.3, 0.5, 0.9})
    for (const double k : {-2.0, 0.0, 0.7})
      EXPECT_NEAR(local_variance(point_at(s, k, t), k).value(), 0.04, kRounding) << t << ' ' << k;
}

// Near expiry the local volatility is the harmonic mean's inverse: s_loc = s / (1 - k s'/s).
// H. Berestycki, J. Busca, I. Florent, Quantitative Finance 2 (2002) 61-69; from memory.
TEST(LocalVariance, AtShortTimesIsThatOfTheHarmonicMean) {
  const Surface s = curved();
  constexpr double kTime = 1e-9;  // what is left out is of the order of w, some 1e-10
  for (const double k : {-0.3, -0.05, 0.0, 0.1}) {
    const SmilePoint p = smile_of(s.slices[0], k);
    const double vol = std::sqrt(p.w / 0.25), turn = 1 - 0.5 * k * p.dw_dk / p.w;
    EXPECT_NEAR(std::sqrt(local_variance(point_at(s, k, kTime), k).value()), vol / turn, 1e-9) << k;
  }
}

TEST(LocalVariance, IsNothingWhereItWouldBeNegativeOrNoNumber) {
  EXPECT_EQ(local_variance({0.04, 0, -2, 0.04}, 0), std::nullopt);  // g = 0
  EXPECT_EQ(local_variance({0.04, 0, -4, 0.04}, 0), std::nullopt);  // g < 0
  EXPECT_EQ(local_variance({0.04, 0, 0, -1e-9}, 0), std::nullopt);  // w falls in time
  EXPECT_EQ(local_variance({0, 0, 0, 0.04}, 0), std::nullopt);
  EXPECT_EQ(local_variance({0.04, 0, 0, Limits::quiet_NaN()}, 0), std::nullopt);
  EXPECT_EQ(local_variance({0.04, Limits::infinity(), 0, 0.04}, 0), std::nullopt);
  EXPECT_EQ(local_variance({0.04, 0, 0, 0}, 0), 0.0);
}

TEST(DerivedAt, IsTheOutOfTheMoneyOptionUnlessOneIsAskedFor) {
  const Surface s = curved();
  const TimedSmile smile(s, 0.5);
  const Carried carried = carried_at(s, 0.5);
  EXPECT_EQ(derived_at(smile, carried, -0.1)->put_call, PutCall::put);
  EXPECT_EQ(derived_at(smile, carried, 0.0)->put_call, PutCall::call);
  EXPECT_EQ(derived_at(smile, carried, 0.1)->put_call, PutCall::call);
  const auto call = derived_at(smile, carried, -0.1, PutCall::call);
  const auto put = derived_at(smile, carried, -0.1, PutCall::put);
  // Parity, of prices and of delta, gamma and vega.
  const double parity = carried.discount_factor * (carried.forward - call->strike);
  EXPECT_NEAR(call->price - put->price, parity, 100 * kRounding);
  EXPECT_NEAR(call->greeks.delta - put->greeks.delta, carried.discount_factor, kRounding);
  EXPECT_EQ(call->greeks.gamma, put->greeks.gamma);
  EXPECT_EQ(call->greeks.vega, put->greeks.vega);
}

TEST(DerivedAt, GreeksAreDifferencesOfThePriceAtTheVolatilityOfTheStrike) {
  const Surface s = curved();
  const TimedSmile smile(s, 0.6);
  const Carried carried = carried_at(s, 0.6);
  for (const double k : {-0.2, 0.0, 0.15}) {
    const auto d = derived_at(smile, carried, k).value();
    const auto price = [&](double forward, double vol) {
      return pricing::black_price({d.put_call, forward, d.strike, carried.discount_factor},
                                  vol * std::sqrt(0.6));
    };
    EXPECT_NEAR(d.price, price(carried.forward, d.vol), 100 * kRounding);
    // Steps of 1e-3 of the forward, 1e-4 of vol: truncation a sixth (a twelfth) of the square times
    // third (fourth) derivatives, of order 1/s^2 of the value; s is 0.15 here. Rounding is less.
    const double h = 1e-3 * carried.forward, kFirst = 1e-6 / (6 * 0.15 * 0.15);
    const double up = price(carried.forward + h, d.vol), down = price(carried.forward - h, d.vol);
    EXPECT_NEAR(d.greeks.delta, (up - down) / (2 * h), kFirst) << k;
    EXPECT_NEAR(d.greeks.gamma, (up - 2 * d.price + down) / (h * h), kFirst * d.greeks.gamma * 4)
        << k;
    const double vega =
        (price(carried.forward, d.vol + 1e-4) - price(carried.forward, d.vol - 1e-4)) / 2e-4;
    EXPECT_NEAR(d.greeks.vega, vega, 1e-5 * vega) << k;
  }
}

// The worked number of docs/methods.md, to its digits.
TEST(DerivedAt, WorkedNumberOfTheManual) {
  const Surface s{"HALYRD", {}, {{quotes::Instant{}, 1, 100, 1, {0.04, 0, 0}, 0, 0}}};
  const TimedSmile smile(s, 1);
  const auto d = derived_at(smile, carried_at(s, 1), 0).value();
  EXPECT_NEAR(d.density.value(), 0.01984763, 5e-9);
  EXPECT_NEAR(d.local_vol.value(), 0.2, kRounding);
  EXPECT_NEAR(variance_swap(smile)->vol, 0.2, 1e-12);
}

TEST(DerivedAt, AtTheForwardHasItsBits) {
  const Surface s = curved();
  EXPECT_EQ(derived_at(TimedSmile(s, 0.75), carried_at(s, 0.75), 0)->strike, 103);
}

TEST(DerivedAt, IsNothingWhereNumbersEnd) {
  const Surface s = curved();
  const TimedSmile smile(s, 0.5);
  const Carried carried = carried_at(s, 0.5);
  EXPECT_FALSE(derived_at(smile, carried, 800).has_value());
  EXPECT_FALSE(derived_at(smile, carried, -800).has_value());
  EXPECT_FALSE(derived_at(smile, {Limits::infinity(), 1}, 0).has_value());
  EXPECT_FALSE(derived_at(smile, {100, 0}, 0).has_value());
}

// What no fit gives but a stored file may hold: w is below 0 about one strike.
Surface sunk(std::size_t slice) {
  Surface s = curved();
  s.slices[slice].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0, 0, -0.2, 0}};
  return s;
}

TEST(DerivedAt, IsNothingWhereAnOverlayTakesTheVarianceBelowZero) {
  const double kHole = 0, kElsewhere = -0.4;
  for (const Between rule : {Between::variance, Between::price})
    for (const std::size_t slice : {0, 1}) {
      Surface s = sunk(slice);
      s.slices[0].to_next = rule;
      const auto at = [&](double t, double k) {
        return derived_at(TimedSmile(s, t), carried_at(s, t), k).has_value();
      };
      ASSERT_LT(smile_of(s.slices[slice], kHole).w, 0);
      const std::vector<double> about_it =
          slice == 0 ? std::vector<double>{0.1, 0.25, 0.26} : std::vector<double>{0.7, 0.75, 0.76};
      for (const double t : about_it) {
        EXPECT_FALSE(at(t, kHole)) << slice << ' ' << t;
        EXPECT_TRUE(at(t, kElsewhere)) << slice << ' ' << t;
        EXPECT_FALSE(variance_swap(TimedSmile(s, t)).has_value()) << slice << ' ' << t;
      }
      for (const double t : {1e-6, 0.1, 0.25, 0.26, 0.5, 0.74, 0.75, 0.76, 5.0})
        for (double k = -0.6; k <= 0.6; k += 0.01)
          if (const auto d = derived_at(TimedSmile(s, t), carried_at(s, t), k)) {
            for (const double v :
                 {d->vol, d->price, d->greeks.delta, d->greeks.gamma, d->greeks.vega,
                  d->density.value_or(0), d->local_vol.value_or(0)})
              ASSERT_TRUE(std::isfinite(v)) << slice << ' ' << t << ' ' << k;
          }
    }
}

TEST(DerivedAt, FarOutEveryNumberIsThereOrSaidNotToBe) {
  const Surface s = curved();
  for (const double t : {1e-6, 0.25, 0.5, 3.0})
    for (double k = -600; k <= 600; k += 7.3) {
      const auto d = derived_at(TimedSmile(s, t), carried_at(s, t), k);
      ASSERT_TRUE(d.has_value()) << t << ' ' << k;
      for (const double v : {d->strike, d->vol, d->price, d->greeks.delta, d->greeks.gamma,
                             d->greeks.vega, d->density.value_or(0), d->local_vol.value_or(0)})
        EXPECT_TRUE(std::isfinite(v)) << t << ' ' << k;
    }
}

TEST(VarianceSwap, OfAFlatSmileIsItsVariance) {
  for (const double vol : {0.001, 0.2, 3.0})
    for (const double t : {0.001, 0.5, 2.0}) {
      const auto swap = variance_swap(TimedSmile(flat(vol), t));
      ASSERT_TRUE(swap.has_value()) << vol << ' ' << t;
      // Normal weight over some ten pieces, each summed to 1e-13.
      EXPECT_NEAR(swap->vol / vol, 1, 1e-12) << vol << ' ' << t;
      EXPECT_DOUBLE_EQ(swap->variance, swap->vol * swap->vol);
    }
}

TEST(VarianceSwap, OfASkewedSmileLiesAboveTheMoney) {
  const Surface s = curved();
  for (const double t : {0.1, 0.25, 0.5, 0.75, 1.0})
    EXPECT_GT(variance_swap(TimedSmile(s, t))->vol, vol_at(s, 0, t)) << t;
}

// Where a wing grows as 2 |k| or faster, d2 no longer runs to its end and E ln S is not finite
// (R. Lee, Mathematical Finance 14 (2004)).
TEST(VarianceSwap, WingsBelowTheBoundHaveAStrikeAndThosePastItNone) {
  Surface s = flat(0.3);
  const double theta = s.slices[0].backbone.theta;
  const auto with_left_wing = [&](double slope) {  // of w in |k|
    s.slices[0].backbone = {theta, -0.9, 2 * slope / 1.9};
    return variance_swap(TimedSmile(s, 0.5));
  };
  for (const double slope : {0.5, 1.0, 1.5, 1.9}) {
    const auto swap = with_left_wing(slope);
    ASSERT_TRUE(swap.has_value()) << slope;
    EXPECT_GT(swap->vol, 0.3) << slope;
  }
  EXPECT_FALSE(with_left_wing(2).has_value());
  EXPECT_FALSE(with_left_wing(2.2).has_value());
}

TEST(VarianceSwap, IsNothingOnASurfaceWithoutVolatility) {
  Surface s = curved();
  s.slices[0].overlay = {{-0.4, -0.2, 0, 0.2, 0.4, 0.6}, {0, Limits::max(), Limits::max(), 0}};
  EXPECT_FALSE(variance_swap(TimedSmile(s, 0.25)).has_value());
}

TEST(Breaks, AreTheKnotsInUse) {
  Surface s = curved();
  s.slices[0].overlay = {{-0.4, -0.2, 0, 0.2, 0.4, 0.5}, {0, 0.001, 0.001, 0}};
  EXPECT_EQ(TimedSmile(s, 0.1).breaks(), s.slices[0].overlay.knots);
  EXPECT_EQ(TimedSmile(s, 0.5).breaks(),
            (std::vector<double>{-0.5, -0.4, -0.3, -0.2, -0.1, 0, 0.1, 0.2, 0.3, 0.4, 0.5}));
  EXPECT_EQ(TimedSmile(s, 0.75).breaks().size(), 11u);
  EXPECT_EQ(TimedSmile(s, 0.8).breaks(), s.slices[1].overlay.knots);
}

}  // namespace
}  // namespace duskgrid::surface
