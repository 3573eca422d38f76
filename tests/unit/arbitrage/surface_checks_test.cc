#include "arbitrage/surface_checks.h"

#include <gtest/gtest.h>

#include <cmath>

#include "pricing/black.h"

namespace duskgrid::arbitrage {
namespace {

using surface::Slice;
using surface::SliceParameters;
using surface::Surface;

Slice slice_at(double t, const SliceParameters& parameters, double forward = 100,
               double discount = 0.98) {
  const auto seconds = std::chrono::seconds{static_cast<std::int64_t>(t * 31536000)};
  return {quotes::Instant{} + seconds, t, forward, discount, parameters, -0.3, 0.3};
}

Surface clean_surface() {
  return {"KELPWK",
          {},
          {slice_at(0.25, {0.01, -0.5, 0.15}), slice_at(0.75, {0.03, -0.4, 0.25}, 103, 0.96),
           slice_at(2.0, {0.09, -0.3, 0.45}, 107, 0.91)}};
}

int count(const SurfaceCheck& check, Kind kind) {
  int n = 0;
  for (const Violation& v : check.violations) n += v.kind == kind;
  return n;
}

TEST(CheckSurface, SurfaceFreeOfArbitrageHasNoViolation) {
  const auto check = check_surface(clean_surface());
  EXPECT_TRUE(check.violations.empty());
  EXPECT_GT(check.least_durrleman, 0);
  EXPECT_GT(check.least_calendar_step, 0);
}

TEST(CheckSurface, FlatSurfaceHasGOfOne) {
  const auto check =
      check_surface({"FLAT", {}, {slice_at(0.5, {0.02, 0, 0}), slice_at(1, {0.04, 0, 0})}});
  EXPECT_TRUE(check.violations.empty());
  EXPECT_EQ(check.least_durrleman, 1);
  EXPECT_DOUBLE_EQ(check.least_calendar_step, 0.01);  // half way, and from there
}

// psi^2 (1 + |rho|) / theta = 29, far above the 4 that is sufficient.
TEST(CheckSurface, TooMuchCurvatureIsAButterflyThatItsOwnPricesConfirm) {
  const Surface s{"BENT", {}, {slice_at(0.5, {0.02, -0.2, 0.7})}};
  const auto check = check_surface(s);
  EXPECT_LT(check.least_durrleman, 0);
  ASSERT_GE(count(check, Kind::butterfly), 1);
  for (const Violation& v : check.violations) {
    EXPECT_EQ(v.scope, Scope::surface);
    EXPECT_GT(v.amount, 0);
    ASSERT_EQ(v.legs.size(), 3u);
    ASSERT_EQ(v.strikes.size(), 3u);
    // The legs are calls at the surface's prices and weigh like a line through the middle strike.
    double credit = 0, slope = 0;
    for (const Leg& leg : v.legs) {
      const double k = std::log(leg.strike / 100);
      EXPECT_NEAR(leg.price,
                  pricing::black_price({quotes::PutCall::call, 100, leg.strike, 0.98},
                                       std::sqrt(surface::smile_at(s.slices[0].backbone, k).w)),
                  1e-11);
      credit -= leg.quantity * leg.price;
      slope += leg.quantity * leg.strike;
    }
    EXPECT_NEAR(credit, v.amount, 1e-11);
    EXPECT_NEAR(slope, 0, 1e-11);  // quantities of a butterfly, rounded
    const double k = std::log(v.strikes[1] / 100);
    EXPECT_LT(surface::durrleman(surface::smile_at(s.slices[0].backbone, k), k), 0);
  }
}

TEST(CheckSurface, LeastDurrlemanIsThatOfADenserScan) {
  const SliceParameters bent{0.02, -0.2, 0.7};
  const auto check = check_surface({"BENT", {}, {slice_at(0.5, bent)}});
  double least = 1;
  for (double k = -2; k <= 2; k += 1e-5)
    least = std::min(least, surface::durrleman(surface::smile_at(bent, k), k));
  // The check's points are 1.7e-3 apart; g'' is near 110 at its least: 110 (0.86e-3)^2 / 2.
  EXPECT_NEAR(check.least_durrleman, least, 1e-4);
  EXPECT_GE(check.least_durrleman, least - 1e-12);
}

TEST(CheckSurface, FallingTotalVarianceIsACalendar) {
  Surface s = clean_surface();
  s.slices[1].backbone = {0.008, -0.5, 0.1};
  const auto check = check_surface(s);
  EXPECT_LT(check.least_calendar_step, 0);
  ASSERT_GE(count(check, Kind::calendar), 1);
  for (const Violation& v : check.violations) {
    if (v.kind != Kind::calendar) continue;
    EXPECT_GT(v.amount, 0);
    EXPECT_LT(v.expiry, v.expiry_2);
    ASSERT_EQ(v.legs.size(), 2u);
    EXPECT_EQ(v.legs[0].quantity, -1);
    EXPECT_NEAR(-v.legs[0].quantity * v.legs[0].price - v.legs[1].quantity * v.legs[1].price,
                v.amount, 1e-12);
    EXPECT_TRUE(std::isfinite(v.vol_points) && v.vol_points > 0);
  }
}

// Slices that cross in one wing only.
TEST(CheckSurface, CrossingInOneWingIsFoundThere) {
  const Surface s{
      "CROSS", {}, {slice_at(0.5, {0.02, -0.7, 0.2}), slice_at(0.6, {0.021, 0.5, 0.2})}};
  const auto check = check_surface(s);
  ASSERT_GE(count(check, Kind::calendar), 1);
  for (const Violation& v : check.violations)
    if (v.kind == Kind::calendar) {
      EXPECT_LT(v.strikes[0], 100);
    }
}

TEST(CheckSurface, WingSteeperThanTwoIsNamedWing) {
  const Surface s{"STEEP", {}, {slice_at(1, {0.8, 0.5, 3.0})}};  // psi (1 + rho) / 2 = 2.25
  const auto check = check_surface(s);
  EXPECT_EQ(count(check, Kind::wing), 1);
  for (const Violation& v : check.violations) EXPECT_GT(v.amount, 0) << word(v.kind);
}

// The smiles of two expiries, swapped: the later one is worth less at every strike.
Surface swapped_surface() {
  auto s = clean_surface();
  std::swap(s.slices[0].backbone, s.slices[2].backbone);
  return s;
}

double cost_of(const Violation& v) {
  double cost = 0;
  for (const Leg& leg : v.legs) cost += leg.quantity * leg.price;
  return cost;
}

TEST(ViolationsOf, CrossingOverAWholeRegionIsTradedWhereItLocksInMost) {
  const auto s = swapped_surface();
  const auto certificate = certify(s);
  int calendars = 0;
  for (const Violation& v : violations_of(s, certificate)) {
    if (v.kind != Kind::calendar) continue;
    ++calendars;
    EXPECT_NEAR(-cost_of(v), v.amount, 1e-12);  // rounding of prices near 10
    // What one locks in at the money and near it is what is there to beat.
    const std::size_t i = v.expiry == s.slices[0].expiry ? 0 : 1;
    const auto &early = s.slices[i], &late = s.slices[i + 1];
    for (const double k : {-0.5, -0.1, 0.0, 0.1, 0.5}) {
      const auto unit = [&](const Slice& slice) {
        return pricing::black_price({quotes::PutCall::call, 1, std::exp(k), 1},
                                    std::sqrt(surface::smile_of(slice, k).w));
      };
      const double there = early.discount_factor * early.forward * (unit(early) - unit(late));
      // The scan is some hundredths of a deviation apart, and what is locked in is flat at its top.
      EXPECT_GT(v.amount, 0.999 * there) << "slice " << i << ", k " << k;
    }
  }
  EXPECT_EQ(calendars, 2);
}

TEST(ViolationsOf, EveryTradeHasNumbersAndLocksInMoreThanRounding) {
  auto hump = clean_surface();
  hump.slices[1].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0, 0.01, -0.01, 0}};
  hump.slices[1].to_next = surface::Between::variance;
  const Surface steep{"STEEP", {}, {slice_at(1, {0.8, 0.5, 3.0})}};
  for (const Surface& s : {swapped_surface(), hump, steep}) {
    const auto certificate = certify(s);
    const auto found = violations_of(s, certificate);
    EXPECT_FALSE(found.empty()) << s.underlying;
    for (const Violation& v : found) {
      double turnover = 0;
      for (const Leg& leg : v.legs) {
        EXPECT_TRUE(std::isfinite(leg.quantity) && std::isfinite(leg.price) && leg.strike > 0);
        turnover += std::abs(leg.quantity) * leg.price;
      }
      // A price is good to some units in its last place.
      EXPECT_GT(v.amount, 1e-13 * turnover);
      EXPECT_NEAR(-cost_of(v), v.amount, 1e-14 * turnover);
    }
  }
}

TEST(ViolationsOf, SteepWingKeepsItsNameAndLocksInMoreThanFarOut) {
  const Surface s{"STEEP", {}, {slice_at(1, {0.8, 0.5, 3.0})}};
  const Finding wing{Proof::butterfly, 0, std::numeric_limits<double>::infinity(), -0.1, true};
  const auto trade = violation_of(s, wing);
  ASSERT_TRUE(trade.has_value());
  EXPECT_EQ(trade->kind, Kind::wing);
  // 20 deviations out a call is worth next to nothing, and so was the trade there.
  EXPECT_GT(trade->amount, 1e-3);
}

TEST(ViolationsOf, FindingsWithoutATradeHaveNone) {
  auto sunk = clean_surface();
  sunk.slices[0].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0, 0, -0.2, 0}};
  const Finding positive{Proof::positive, 0, 0, -0.1, true};
  EXPECT_FALSE(violation_of(sunk, positive).has_value());
  for (const Violation& v : violations_of(sunk, certify(sunk))) {
    EXPECT_GT(v.amount, 0);
    EXPECT_TRUE(std::isfinite(cost_of(v)));
  }
  const auto clean = clean_surface();
  for (const Proof proof : {Proof::butterfly, Proof::calendar, Proof::between, Proof::after}) {
    // Nothing is to be had where there is no arbitrage, whatever a finding says.
    EXPECT_FALSE(violation_of(clean, {proof, 0, 0.05, -1, true}).has_value()) << word(proof);
    EXPECT_FALSE(violation_of(swapped_surface(), {proof, 0, 0.05, 0, false}).has_value());
  }
}

TEST(CheckSurface, OneSliceHasNoCalendarStep) {
  const auto check = check_surface({"ONE", {}, {slice_at(0.5, {0.02, -0.4, 0.2})}});
  EXPECT_TRUE(check.violations.empty());
  EXPECT_EQ(check.least_calendar_step, std::numeric_limits<double>::infinity());
}

}  // namespace
}  // namespace duskgrid::arbitrage
