#include "arbitrage/grid_checks.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "pricing/black.h"

namespace duskgrid::arbitrage {
namespace {

// Prices near 1 are rounded to 1e-16 and a butterfly adds three of them: far below this, and far
// below the arbitrages looked for.
constexpr double kTolerance = 1e-13;

struct RawSvi {
  double a, b, m, rho, sigma;
  double total_variance(double k) const {
    return a + b * (rho * (k - m) + std::sqrt((k - m) * (k - m) + sigma * sigma));
  }
};

// J. Gatheral, A. Jacquier, Quantitative Finance 14 (2014) 59-71, eq. 3.8 and example 3.1 (after
// A. Vogt), t = 1: the slice has a butterfly arbitrage.
constexpr RawSvi kVogt{-0.0410, 0.1331, 0.3586, 0.3060, 0.4153};
// Where Durrleman's function of that slice is negative: its roots found by bisection, 4 decimals.
constexpr double kBrokenFrom = 0.6425, kBrokenTo = 1.2570;
// Its repair by section 5.1 of the same article, which is guaranteed to be free of arbitrage:
// (c', v~') = (0.3493158, 0.01548182) put back in raw parameters, 7 decimals.
constexpr RawSvi kRepaired{0.0077409, 0.0692420, 0.0420338, -0.3340365, 0.1186080};

constexpr double kStep = 0.01;

VolSlice sampled(const RawSvi& smile) {
  VolSlice slice{quotes::Instant{} + std::chrono::days{365}, 1, 1, 1, {}};
  for (int i = -150; i <= 150; ++i) {
    const double k = kStep * i;
    slice.nodes.push_back({std::exp(k), std::sqrt(smile.total_variance(k))});
  }
  return slice;
}

std::vector<Violation> check(const VolSlice& slice) {
  return check_grid(std::span(&slice, 1), kTolerance);
}

// Log-moneyness of the middle strikes of the butterflies, increasing.
std::vector<double> butterflies(const std::vector<Violation>& found) {
  std::vector<double> middles;
  for (const auto& v : found)
    if (v.kind == Kind::butterfly) middles.push_back(std::log(v.strikes.at(1)));
  std::sort(middles.begin(), middles.end());
  return middles;
}

TEST(CheckGrid, PublishedSliceHasButterfliesWhereItsDensityIsNegativeAndNowhereElse) {
  const VolSlice slice = sampled(kVogt);
  const auto found = butterflies(check(slice));
  ASSERT_FALSE(found.empty());
  // A butterfly weighs the density within a step on either side: the ends are sharp to a step.
  EXPECT_GT(found.front(), kBrokenFrom - kStep);
  EXPECT_LT(found.front(), kBrokenFrom + kStep);
  EXPECT_LT(found.back(), kBrokenTo + kStep);
  EXPECT_GT(found.back(), kBrokenTo - kStep);
  for (std::size_t i = 1; i < found.size(); ++i)
    EXPECT_LT(found[i] - found[i - 1], 1.5 * kStep) << "no butterfly after k = " << found[i - 1];
}

TEST(CheckGrid, PublishedSliceHasVerticalsWhereItsCallPricesRise) {
  // A negative density may take the distribution function past one: calls then rise with strike.
  const auto call = [](double strike) {
    return pricing::black_price({quotes::PutCall::call, 1, strike, 1},
                                std::sqrt(kVogt.total_variance(std::log(strike))));
  };
  int verticals = 0;
  for (const auto& v : check(sampled(kVogt))) {
    EXPECT_EQ(v.scope, Scope::surface);
    if (v.kind == Kind::butterfly) continue;
    ++verticals;
    EXPECT_EQ(v.kind, Kind::vertical);
    EXPECT_NEAR(call(v.strikes.at(1)) - call(v.strikes.at(0)), v.amount, kTolerance);
  }
  EXPECT_GT(verticals, 0);
}

TEST(CheckGrid, GuaranteedRepairOfThePublishedSliceIsClean) {
  EXPECT_TRUE(check(sampled(kRepaired)).empty());
}

VolSlice flat(double t, double vol, double forward = 100) {
  VolSlice slice{quotes::Instant{} + std::chrono::seconds{std::llround(t * 365 * 86400)},
                 t,
                 forward,
                 std::exp(-0.03 * t),
                 {}};
  for (double moneyness = 0.5; moneyness < 1.6; moneyness += 0.05)
    slice.nodes.push_back({forward * moneyness, vol});
  return slice;
}

TEST(CheckGrid, FlatSurfaceIsClean) {
  const std::vector<VolSlice> slices{flat(0.25, 0.2), flat(1, 0.2, 102), flat(3, 0.2, 107)};
  EXPECT_TRUE(check_grid(slices, kTolerance).empty());
}

TEST(CheckGrid, FallingTotalVarianceIsACalendarBreakAndNothingElse) {
  const std::vector<VolSlice> slices{flat(0.25, 0.3), flat(0.5, 0.2, 102)};
  const auto found = check_grid(slices, kTolerance);
  ASSERT_FALSE(found.empty());
  for (const auto& v : found) {
    EXPECT_EQ(v.kind, Kind::calendar);
    EXPECT_EQ(v.scope, Scope::surface);
    EXPECT_EQ(v.expiry, slices[0].expiry);
    EXPECT_EQ(v.expiry_2, slices[1].expiry);
    EXPECT_GT(v.amount, 0);
  }
}

TEST(CheckGrid, OneVolFarAboveItsNeighboursIsAButterflyWithItsLegs) {
  VolSlice slice = flat(0.5, 0.2);
  const std::size_t middle = slice.nodes.size() / 2;
  slice.nodes[middle].vol = 0.25;
  const auto found = check(slice);
  const auto butterfly = std::find_if(found.begin(), found.end(), [&](const Violation& v) {
    return v.kind == Kind::butterfly && v.strikes[1] == slice.nodes[middle].strike;
  });
  ASSERT_NE(butterfly, found.end());
  EXPECT_EQ(butterfly->strikes[0], slice.nodes[middle - 1].strike);
  EXPECT_EQ(butterfly->strikes[2], slice.nodes[middle + 1].strike);
  ASSERT_EQ(butterfly->legs.size(), 3U);
  double cost = 0;
  for (const auto& leg : butterfly->legs) cost += leg.quantity * leg.price;
  EXPECT_NEAR(-cost, butterfly->amount, kTolerance * slice.forward);
}

TEST(CheckGrid, BreakBelowTheToleranceIsNotReported) {
  VolSlice slice = flat(0.5, 0.2);
  slice.nodes[slice.nodes.size() / 2].vol = 0.25;
  // Less than the whole forward is at stake whatever the vols.
  EXPECT_TRUE(check_grid(std::span(&slice, 1), 1).empty());
}

TEST(CheckGrid, EmptyGridAndLoneNodeAreClean) {
  EXPECT_TRUE(check_grid({}, kTolerance).empty());
  EXPECT_TRUE(check({quotes::Instant{}, 1, 100, 1, {{100, 0.2}}}).empty());
}

}  // namespace
}  // namespace duskgrid::arbitrage
