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
