#include "pricing/invert.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr double kInfinity = std::numeric_limits<double>::infinity();
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

const BlackTerms kCall{PutCall::call, 100, 110, 0.98};

TEST(ImpliedVol, ComesBackFromItsPrice) {
  for (const double vol : {0.02, 0.1, 0.3, 1.0, 4.0})
    for (const double strike : {70.0, 95.0, 100.0, 105.0, 140.0})
      for (const auto side : {PutCall::call, PutCall::put}) {
        if ((side == PutCall::call) != (strike >= 100)) continue;  // in the money digits are lost
        const BlackTerms terms{side, 100, strike, 0.98};
        const double price = black_price(terms, vol * std::sqrt(0.25));
        const auto back = implied_vol(terms, price, 0.25);
        if (price < std::numeric_limits<double>::min()) continue;
        ASSERT_EQ(back.status, VolStatus::ok) << vol << ' ' << strike;
        // Price rounding of 100 ulp times a condition of at most 1 for these, relative.
        EXPECT_NEAR(back.vol, vol, 200 * kEps * vol) << vol << ' ' << strike;
      }
}

TEST(ImpliedVol, InTheMoneyPriceGivesTheSameVolAsItsMirror) {
  const BlackTerms deep{PutCall::call, 100, 80, 0.98};
  const double price = black_price(deep, 0.2);
  // The time value is about 1/40 of the price and the vol's condition about 1.
  EXPECT_NEAR(implied_vol(deep, price, 1.0).vol, 0.2, 400 * kEps);
}

TEST(ImpliedVol, TimeOnlyScalesTheVolatility) {
  const double price = 2.5;
  EXPECT_DOUBLE_EQ(implied_vol(kCall, price, 1.0).vol, 2 * implied_vol(kCall, price, 4.0).vol);
}

TEST(ImpliedVol, PriceAtOrBelowIntrinsicIsZeroVolByName) {
  const BlackTerms deep{PutCall::put, 100, 120, 0.98};
  for (const double price : {0.98 * 20, 19.0, 0.0, -1.0}) {
    const auto v = implied_vol(deep, price, 1.0);
    EXPECT_EQ(v.status, VolStatus::below_intrinsic) << price;
    EXPECT_EQ(v.vol, 0) << price;
  }
  EXPECT_EQ(implied_vol(kCall, 0.0, 1.0).status, VolStatus::below_intrinsic);
}

TEST(ImpliedVol, PriceAtOrAboveTheBoundIsAboveBound) {
  for (const double price : {98.0, 99.0, 1e300}) {
    const auto v = implied_vol(kCall, price, 1.0);
    EXPECT_EQ(v.status, VolStatus::above_bound) << price;
    EXPECT_FALSE(std::isnan(v.vol)) << price;
  }
}

TEST(ImpliedVol, InputsThatAreNoMarketAreNotFinite) {
  const BlackTerms bad[] = {{PutCall::call, kNaN, 100, 1}, {PutCall::call, 0, 100, 1},
                            {PutCall::call, 100, -1, 1},   {PutCall::call, 100, kInfinity, 1},
                            {PutCall::call, 100, 100, 0},  {PutCall::call, 100, 100, kNaN}};
  for (const auto& terms : bad) {
    const auto v = implied_vol(terms, 5, 1);
    EXPECT_EQ(v.status, VolStatus::not_finite);
    EXPECT_FALSE(std::isnan(v.vol));
  }
  for (const double price : {kNaN, kInfinity, -kInfinity})
    EXPECT_EQ(implied_vol(kCall, price, 1).status, VolStatus::not_finite);
  for (const double t : {0.0, -1.0, kNaN, kInfinity})
    EXPECT_EQ(implied_vol(kCall, 5, t).status, VolStatus::not_finite);
}

TEST(ImpliedVol, NeverNaNNearTheEndsOfTheRange) {
  const BlackTerms extremes[] = {
      {PutCall::call, 100, 1e6, 1},       {PutCall::put, 100, 1e-4, 1},
      {PutCall::call, 1e-300, 2e-300, 1}, {PutCall::call, 1e300, 1.5e300, 1},
      {PutCall::call, 100, 100, 1},       {PutCall::put, 100, std::nextafter(100, 0), 1}};
  for (const auto& terms : extremes) {
    const double bound = upper_bound(terms);
    for (const double price :
         {std::numeric_limits<double>::denorm_min(), 1e-310, 1e-200 * bound, 1e-16 * bound,
          0.5 * bound, bound * (1 - kEps), std::nextafter(bound, 0.0)}) {
      const auto v = implied_vol(terms, price, 1.0);
      EXPECT_FALSE(std::isnan(v.vol)) << terms.strike << ' ' << price;
      if (v.status == VolStatus::ok) {
        EXPECT_TRUE(v.vol > 0 && std::isfinite(v.vol)) << terms.strike << ' ' << price;
      }
    }
  }
}

TEST(ImpliedVol, GrowsWithThePrice) {
  const double bound = upper_bound(kCall);
  double previous = 0;
  for (double price = 1e-12; price < bound; price *= 1.02) {
    const auto v = implied_vol(kCall, price, 1.0);
    ASSERT_EQ(v.status, VolStatus::ok) << price;
    EXPECT_GT(v.vol, previous) << price;
    previous = v.vol;
  }
}

TEST(VolStatus, EachHasItsWords) {
  EXPECT_EQ(word(VolStatus::ok), "ok");
  EXPECT_EQ(word(VolStatus::below_intrinsic), "below intrinsic");
  EXPECT_EQ(word(VolStatus::above_bound), "above bound");
  EXPECT_EQ(word(VolStatus::not_finite), "not finite");
}

}  // namespace
}  // namespace duskgrid::pricing
