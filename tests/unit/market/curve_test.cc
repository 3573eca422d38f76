#include "market/curve.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace duskgrid::market {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// One weight, one product and one sum of numbers below 1: relative.
constexpr double kRounding = 4 * std::numeric_limits<double>::epsilon();

ZeroCurve curve() { return ZeroCurve::make({{1.0, 0.03}, {0.25, 0.01}, {2.0, 0.02}}).value(); }

TEST(ZeroCurve, RateAtAPointIsThePoints) {
  EXPECT_DOUBLE_EQ(curve().rate(0.25), 0.01);
  EXPECT_DOUBLE_EQ(curve().rate(1.0), 0.03);
  EXPECT_DOUBLE_EQ(curve().rate(2.0), 0.02);
}

TEST(ZeroCurve, RateBetweenPointsIsLinearInTime) {
  EXPECT_NEAR(curve().rate(0.625), 0.02, 0.02 * kRounding);
  EXPECT_NEAR(curve().rate(1.25), 0.0275, 0.0275 * kRounding);
}

TEST(ZeroCurve, RateOutsideThePointsIsFlat) {
  EXPECT_EQ(curve().rate(0.001), 0.01);
  EXPECT_EQ(curve().rate(30.0), 0.02);
}

TEST(ZeroCurve, DiscountFactorIsContinuous) {
  EXPECT_DOUBLE_EQ(curve().discount_factor(2.0), std::exp(-0.04));
  EXPECT_EQ(curve().discount_factor(0.0), 1.0);
}

TEST(ZeroCurve, NegativeRatesAreRates) {
  EXPECT_GT(ZeroCurve::make({{1.0, -0.005}}).value().discount_factor(1.0), 1.0);
}

TEST(ZeroCurve, BadPointsAreRefusedAsConfiguration) {
  const std::vector<std::vector<ZeroPoint>> bad{{},
                                                {{0.0, 0.01}},
                                                {{-1.0, 0.01}},
                                                {{1.0, 3.0}},
                                                {{1.0, kNaN}},
                                                {{kNaN, 0.01}},
                                                {{1.0, 0.01}, {1.0, 0.02}}};
  for (const auto& points : bad) {
    const auto made = ZeroCurve::make(points);
    ASSERT_FALSE(made.ok());
    EXPECT_EQ(made.failure().fault, Fault::configuration);
    EXPECT_FALSE(made.failure().detail.empty());
  }
}

}  // namespace
}  // namespace duskgrid::market
