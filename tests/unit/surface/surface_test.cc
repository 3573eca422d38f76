#include "surface/surface.h"

#include <gtest/gtest.h>

#include <cmath>

namespace duskgrid::surface {
namespace {

// A handful of products and an exponential of numbers of order 1: relative.
constexpr double kRounding = 1e-14;

Surface made(std::optional<double> spot = 100) {
  return {"HALYRD",
          spot,
          {{quotes::Instant{}, 0.25, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2},
           {quotes::Instant{}, 0.75, 103, 0.97, {0.03, -0.4, 0.25}, -0.5, 0.3},
           {quotes::Instant{}, 2.00, 107, 0.91, {0.09, -0.3, 0.45}, -0.8, 0.6}}};
}

TEST(SmileAtTime, AtASliceIsTheSlice) {
  const Surface s = made();
  for (const Slice& slice : s.slices)
    for (const double k : {-0.7, 0.0, 0.4}) {
      const SurfacePoint point = point_at(s, k, slice.year_fraction);
      const SmilePoint own = smile_at(slice.backbone, k);
      EXPECT_EQ(point.w, own.w);
      EXPECT_EQ(point.dw_dk, own.dw_dk);
      EXPECT_EQ(point.d2w_dk2, own.d2w_dk2);
    }
}

TEST(SmileAtTime, BetweenSlicesTotalVarianceIsLinearInTime) {
  const Surface s = made();
  for (const double k : {-0.7, 0.0, 0.4}) {
    const SmilePoint a = smile_at(s.slices[0].backbone, k), b = smile_at(s.slices[1].backbone, k);
    const SurfacePoint half = point_at(s, k, 0.5);
    EXPECT_DOUBLE_EQ(half.w, 0.5 * (a.w + b.w));
    EXPECT_DOUBLE_EQ(half.dw_dk, 0.5 * (a.dw_dk + b.dw_dk));
    EXPECT_DOUBLE_EQ(half.d2w_dk2, 0.5 * (a.d2w_dk2 + b.d2w_dk2));
    EXPECT_DOUBLE_EQ(half.dw_dt, (b.w - a.w) / 0.5);
  }
}

TEST(SmileAtTime, VarianceIsContinuousAcrossSlices) {
  const Surface s = made();
  constexpr double kStep = 1e-9;
  for (const Slice& slice : s.slices)
    for (const double k : {-0.5, 0.0, 0.3})
      // Slopes in time are below 1 a year here.
      for (const double t : {slice.year_fraction - kStep, slice.year_fraction + kStep})
        EXPECT_NEAR(point_at(s, k, t).w, smile_at(slice.backbone, k).w, kStep) << k << ' ' << t;
}

TEST(SmileAtTime, BeforeTheFirstSliceItsVolatilitiesHold) {
  const Surface s = made();
  for (const double k : {-0.4, 0.0, 0.2})
    for (const double t : {1e-4, 0.1, 0.2499})
      EXPECT_NEAR(vol_at(s, k, t), vol_at(s, k, 0.25), kRounding) << k << ' ' << t;
}

TEST(SmileAtTime, AfterTheLastSliceEveryStrikeGainsTheSameVariance) {
  const Surface s = made();
  for (const double k : {-1.0, 0.0, 0.7}) {
    const SurfacePoint last = point_at(s, k, 2.0), later = point_at(s, k, 3.0);
    EXPECT_NEAR(later.w - last.w, 0.09 / 2, kRounding) << k;
    EXPECT_EQ(later.dw_dk, last.dw_dk) << k;
    EXPECT_EQ(later.d2w_dk2, last.d2w_dk2) << k;
  }
  EXPECT_NEAR(vol_at(s, 0, 9.0), vol_at(s, 0, 2.0), kRounding);
}

TEST(SmileAtTime, TwoFlatSlicesStayFlatBetween) {
  Surface s = made();
  s.slices[0].backbone = {0.01, 0.2, 0};
  s.slices[1].backbone = {0.03, -0.7, 0};
  for (const double k : {-1.0, 0.0, 1.0}) EXPECT_DOUBLE_EQ(point_at(s, k, 0.5).w, 0.02);
}

TEST(SmileAtTime, OneSliceServesEveryTime) {
  Surface s = made();
  s.slices.resize(1);
  EXPECT_NEAR(vol_at(s, 0.1, 0.05), vol_at(s, 0.1, 0.25), kRounding);
  EXPECT_NEAR(vol_at(s, 0.0, 4.0), vol_at(s, 0.0, 0.25), kRounding);
}

// Where the later of two crossing slices is the lower one, the smile jumped to it.
TEST(SmileAtTime, PricesMixAlsoWhereTheSlicesCross) {
  Surface s = made();
  s.slices.resize(2);
  s.slices[0].to_next = Between::price;
  s.slices[0].backbone = {0.02, 0, 0.25};
  s.slices[1].backbone = {0.03, 0, 0};  // flat, and below the first from |k| = 0.14 on
  const TimedSmile half(s, 0.5);
  for (const double k : {-2.0, -0.5, 0.5, 2.0}) {
    const double first = smile_at(s.slices[0].backbone, k).w, w = half.at(k).w;
    EXPECT_GT(w, 0.03) << k;
    EXPECT_LT(w, first) << k;
    EXPECT_LT(half.at(k).dw_dt, 0) << k;
  }
}

// Each slice with an overlay that is not 0 in the wings.
Surface overlaid() {
  Surface s = made();
  const std::vector<double> knots{-0.5, -0.3, -0.15, 0, 0.1, 0.25, 0.4};
  s.slices[0].overlay = {knots, {0.0002, 0.0004, -0.0003, 0.0005, 0.0001}};
  s.slices[1].overlay = {knots, {0.0006, -0.0002, 0.0009, 0.0004, 0.0008}};
  s.slices[2].overlay = {knots, {0.001, 0.002, -0.001, 0.001, 0.0015}};
  return s;
}

// The worked number of section 6 of docs/methods.md, to its digits.
TEST(SmileAtTime, WorkedNumberOfTheManual) {
  Surface s{"HALYRD",
            {},
            {{quotes::Instant{}, 1, 100, 1, {0.04, -0.4, 0.2}, -0.3, 0.2},
             {quotes::Instant{}, 2, 100, 1, {0.08, -0.3, 0.28}, -0.3, 0.2}}};
  constexpr double kDigits = 5e-7;
  EXPECT_NEAR(point_at(s, -0.2, 0.5).w, 0.030733, kDigits);
  EXPECT_NEAR(point_at(s, -0.2, 1).w, 0.061466, kDigits);
  EXPECT_NEAR(point_at(s, -0.2, 1.5).w, 0.082574, kDigits);
  EXPECT_NEAR(point_at(s, -0.2, 2).w, 0.103681, kDigits);
  EXPECT_NEAR(point_at(s, -0.2, 2.5).w, 0.123681, kDigits);
  s.slices[0].to_next = Between::price;
  EXPECT_NEAR(point_at(s, -0.2, 1.5).w, 0.083685, kDigits);
  EXPECT_NEAR(point_at(s, 0, 1.5).w, 0.06, kDigits);
}

TEST(SmileOf, IsTheBackboneAndTheOverlayAdded) {
  for (const Slice& slice : overlaid().slices)
    for (const double k : {-0.7, -0.2, 0.0, 0.33, 0.9}) {
      const SmilePoint b = smile_at(slice.backbone, k), w = smile_of(slice, k);
      const OverlayPoint u = overlay_at(slice.overlay, k);
      EXPECT_EQ(w.w, b.w + u.u);
      EXPECT_EQ(w.dw_dk, b.dw_dk + u.du_dk);
      EXPECT_EQ(w.d2w_dk2, b.d2w_dk2 + u.d2u_dk2);
    }
}

TEST(SmileAtTime, AtAnExpiryItsOwnBitsUnderEitherRule) {
  for (const Between rule : {Between::variance, Between::price}) {
    Surface s = overlaid();
    for (Slice& slice : s.slices) slice.to_next = rule;
    for (const Slice& slice : s.slices)
      for (const double k : {-0.7, -0.2, 0.0, 0.33, 0.9})
        EXPECT_EQ(point_at(s, k, slice.year_fraction).w, smile_of(slice, k).w);
  }
}

TEST(SmileAtTime, VarianceAtTheMoneyIsLinearInTimeUnderEitherRule) {
  for (const Between rule : {Between::variance, Between::price}) {
    Surface s = overlaid();
    s.slices[0].to_next = rule;
    const double a = smile_of(s.slices[0], 0).w, b = smile_of(s.slices[1], 0).w;
    EXPECT_NEAR(point_at(s, 0, 0.375).w, 0.75 * a + 0.25 * b, kRounding * b);
    EXPECT_NEAR(point_at(s, 0, 0.375).dw_dt, (b - a) / 0.5, kRounding);
  }
}

TEST(SmileAtTime, AfterTheLastSliceItsOverlayStaysAndEveryStrikeGains) {
  const Surface s = overlaid();
  const double money = smile_of(s.slices[2], 0).w;
  for (const double k : {-1.0, -0.2, 0.0, 0.7}) {
    const SmilePoint last = smile_of(s.slices[2], k);
    const SurfacePoint later = point_at(s, k, 3.0);
    EXPECT_NEAR(later.w, last.w + 0.5 * money, kRounding) << k;
    EXPECT_EQ(later.dw_dk, last.dw_dk) << k;
    EXPECT_EQ(later.d2w_dk2, last.d2w_dk2) << k;
    EXPECT_EQ(later.dw_dt, money / 2) << k;
  }
}

// Without a price at one end the other end's smile was given.
TEST(SmileAtTime, PricesDoNotMixWhereTheEarlierSmileHasNoVolatility) {
  Surface s = overlaid();
  s.slices[0].to_next = Between::price;
  for (double& c : s.slices[0].overlay.coefficients) c = -0.02;
  for (const double t : {0.25, 0.2501, 0.5, 0.7499})
    for (const double k : {-0.02, 0.0, 0.05}) {
      EXPECT_LT(point_at(s, k, t).w, 0) << t << ' ' << k;
      EXPECT_GT(point_at(s, k, 0.75).w, 0) << k;
    }
}

// Where the last slice has none at the money, the rule of the times before the first held.
TEST(SmileAtTime, AfterALastSliceBelowZeroAtTheMoneyItsVarianceFalls) {
  Surface s = overlaid();
  for (double& c : s.slices[2].overlay.coefficients) c = -0.1;
  const double money = smile_of(s.slices[2], 0).w;
  ASSERT_LT(money, 0);
  for (const double k : {-2.0, 0.0, 0.1}) {
    EXPECT_NEAR(point_at(s, k, 3.0).w, smile_of(s.slices[2], k).w + 0.5 * money, kRounding) << k;
    EXPECT_LT(point_at(s, k, 3.0).dw_dt, 0) << k;
  }
}

TEST(CarriedAt, AtASliceIsTheSlices) {
  const Carried c = carried_at(made(), 0.75);
  EXPECT_EQ(c.forward, 103);
  EXPECT_EQ(c.discount_factor, 0.97);
}

TEST(CarriedAt, BetweenSlicesLogarithmsAreLinear) {
  const Carried c = carried_at(made(), 0.5);
  EXPECT_NEAR(c.forward, std::sqrt(101.0 * 103.0), 103 * kRounding);
  EXPECT_NEAR(c.discount_factor, std::sqrt(0.99 * 0.97), kRounding);
}

TEST(CarriedAt, BeforeTheFirstSliceTheLineStartsAtSpotAndOne) {
  const Carried c = carried_at(made(), 0.125);
  EXPECT_NEAR(c.forward, std::sqrt(100.0 * 101.0), 101 * kRounding);
  EXPECT_NEAR(c.discount_factor, std::sqrt(0.99), kRounding);
}

TEST(CarriedAt, WithoutASpotTheFirstTwoSlicesGrowthHoldsBeforeThem) {
  const Carried c = carried_at(made({}), 0.125);
  EXPECT_NEAR(c.forward, 101 * std::pow(103.0 / 101.0, -0.25), 101 * kRounding);
  Surface one = made({});
  one.slices.resize(1);
  EXPECT_NEAR(carried_at(one, 0.125).forward, 101, 101 * kRounding);
}

TEST(CarriedAt, BeyondTheLastSliceTheLastGrowthGoesOn) {
  const Carried c = carried_at(made(), 3.25);
  EXPECT_NEAR(c.forward, 107.0 * 107.0 / 103.0, 107 * kRounding);
  EXPECT_NEAR(c.discount_factor, 0.91 * 0.91 / 0.97, kRounding);
}

TEST(CarriedAt, OneSliceGoesOnAtItsOwnRates) {
  Surface s = made();
  s.slices.resize(1);
  EXPECT_NEAR(carried_at(s, 0.5).forward, 101.0 * 101.0 / 100.0, 102 * kRounding);
  EXPECT_NEAR(carried_at(s, 0.5).discount_factor, 0.99 * 0.99, kRounding);
}

}  // namespace
}  // namespace duskgrid::surface
