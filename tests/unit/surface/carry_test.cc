#include "surface/carry.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>

namespace duskgrid::surface {
namespace {

constexpr double kDays = 1 / 365.0;
// Volatilities by way of a total variance and its root: some units in the last place.
constexpr double kRounding = 1e-14;

Slice slice(double days, SliceParameters backbone, Overlay overlay = {}) {
  const quotes::Instant expiry{std::chrono::seconds{static_cast<std::int64_t>(days * 86'400)}};
  return {expiry, days * kDays, 100, 0.99, backbone, -0.3, 0.3, std::move(overlay)};
}

Surface three() {
  return {"INVENTED",
          100.0,
          {slice(7, {0.0012, -0.5, 0.05}),
           slice(35, {0.0055, -0.4, 0.1},
                 {{-0.2, -0.12, -0.05, 0.02, 0.1, 0.15}, {0.0001, 0.0003, -0.0002, 0.0001}}),
           slice(98, {0.014, -0.35, 0.16})}};
}

std::vector<CarriedExpiry> after(const Surface& old, double days) {
  std::vector<CarriedExpiry> out;
  for (std::size_t i = 0; i < old.slices.size(); ++i)
    if (const double t = old.slices[i].year_fraction - days * kDays; t > 0)
      out.push_back({i, t, 100 + static_cast<double>(i), 0.98});
  return out;
}

// Largest difference of a carried smile from the old one at its remaining time, decimals of vol.
double furthest(const Surface& old, const Slice& carried) {
  const TimedSmile smile(old, carried.year_fraction);
  const double s0 = std::sqrt(smile.at(0).w);
  double worst = 0;
  for (int i = -500; i <= 500; ++i) {
    const double k = 5 * s0 * i / 500;
    const double a = std::sqrt(smile.at(k).w / carried.year_fraction);
    const double b = std::sqrt(smile_of(carried, k).w / carried.year_fraction);
    worst = std::max(worst, std::abs(a - b));
  }
  return worst;
}

TEST(CarrySurface, VolatilityOfARemainingTimeStaysWithinWhatIsPromised) {
  for (const auto rule : {Between::variance, Between::price}) {
    auto old = three();
    for (auto& s : old.slices) s.to_next = rule;
    for (const double days : {1.0, 3.0, 7.0, 20.0}) {
      // A mixture of prices whose weights have shifted that far is no hyperbola and spline any
      // more.
      if (rule == Between::price && days > 10) continue;
      const auto carried = carry_surface(old, after(old, days), CarryRule::remaining_time);
      ASSERT_TRUE(carried) << days;
      double worst = 0;
      for (const auto& s : carried->slices) worst = std::max(worst, furthest(old, s));
      EXPECT_LE(worst, kMostRestated) << word(rule) << " after " << days << " days";
      RecordProperty(std::string(word(rule)) + std::to_string(static_cast<int>(days)),
                     std::to_string(worst));
    }
  }
}

TEST(CarrySurface, SmileBeforeTheFirstOldExpiryIsExact) {
  const auto old = three();
  const auto carried = carry_surface(old, after(old, 3), CarryRule::remaining_time);
  ASSERT_TRUE(carried);
  EXPECT_LE(furthest(old, carried->slices[0]), kRounding);
}

TEST(CarrySurface, ExpiryKeepsItsVolatilityUnderTheOtherRule) {
  const auto old = three();
  const auto carried = carry_surface(old, after(old, 3), CarryRule::own_expiry);
  ASSERT_TRUE(carried);
  ASSERT_EQ(carried->slices.size(), 3U);
  for (std::size_t i = 0; i < 3; ++i)
    for (const double k : {-0.3, -0.07, 0.0, 0.02, 0.3})
      EXPECT_NEAR(std::sqrt(smile_of(carried->slices[i], k).w / carried->slices[i].year_fraction),
                  std::sqrt(smile_of(old.slices[i], k).w / old.slices[i].year_fraction), kRounding);
}

TEST(CarrySurface, UnderTheOtherRuleTotalVarianceDoesNotFallAndDensitiesStay) {
  const auto old = three();
  for (const double days : {1.0, 6.9}) {
    const auto carried = carry_surface(old, after(old, days), CarryRule::own_expiry);
    ASSERT_TRUE(carried);
    for (int i = -300; i <= 300; ++i) {
      const double k = 0.01 * i;
      for (std::size_t j = 0; j < 3; ++j) {
        const auto point = smile_of(carried->slices[j], k), before = smile_of(old.slices[j], k);
        const double g = durrleman(before, k), c = point.w / before.w;
        const double turn = 1 - 0.5 * k * before.dw_dk / before.w;
        EXPECT_GE(durrleman(point, k), (1 - c) * turn * turn + c * g - kRounding) << k;
        if (j > 0) {
          EXPECT_GE(point.w, smile_of(carried->slices[j - 1], k).w);
        }
      }
    }
  }
}

TEST(CarrySurface, NoTimePassedChangesNothing) {
  const auto old = three();
  for (const auto rule : {CarryRule::remaining_time, CarryRule::own_expiry}) {
    const auto carried = carry_surface(old, after(old, 0), rule);
    ASSERT_TRUE(carried);
    for (std::size_t i = 0; i < 3; ++i) {
      EXPECT_EQ(carried->slices[i].backbone.theta, old.slices[i].backbone.theta);
      EXPECT_EQ(carried->slices[i].overlay.coefficients, old.slices[i].overlay.coefficients);
    }
  }
}

TEST(CarrySurface, ExpiredSlicesAreGoneAndForwardsAreThoseGiven) {
  const auto old = three();
  const auto carried = carry_surface(old, after(old, 10), CarryRule::remaining_time);
  ASSERT_TRUE(carried);
  ASSERT_EQ(carried->slices.size(), 2U);
  EXPECT_EQ(carried->slices[0].expiry, old.slices[1].expiry);
  EXPECT_EQ(carried->slices[0].forward, 101);
  EXPECT_EQ(carried->slices[1].discount_factor, 0.98);
}

TEST(CarrySurface, NumbersOutOfTheirRangesGiveNothing) {
  const auto old = three();
  constexpr double kNan = std::numeric_limits<double>::quiet_NaN();
  const double t = 5 * kDays;
  for (const auto rule : {CarryRule::remaining_time, CarryRule::own_expiry}) {
    EXPECT_FALSE(carry_surface(old, {}, rule));
    for (const auto& wrong :
         {CarriedExpiry{3, t, 100, 1}, CarriedExpiry{0, 8 * kDays, 100, 1},
          CarriedExpiry{0, 0, 100, 1}, CarriedExpiry{0, kNan, 100, 1}, CarriedExpiry{0, t, 0, 1},
          CarriedExpiry{0, t, kNan, 1}, CarriedExpiry{0, t, 100, -1}})
      EXPECT_FALSE(carry_surface(old, std::vector{wrong}, rule));
    const std::vector<CarriedExpiry> unordered{{1, 30 * kDays, 100, 1}, {0, t, 100, 1}};
    EXPECT_FALSE(carry_surface(old, unordered, rule));
  }
}

}  // namespace
}  // namespace duskgrid::surface
