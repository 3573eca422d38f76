#include "publish/compare.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "market/day_count.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;
using std::chrono::days;

const quotes::Clock kClock{"", std::chrono::minutes{-300}};
const quotes::Instant kFriday = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
const quotes::Instant kMonday = kFriday + days{3};
// Differences of volatilities of order 1, each by a root of a sum.
constexpr double kRounding = 1e-14;

struct Spec {
  days ahead;  // of Friday
  double forward;
  surface::SliceParameters at_a_year;  // total variance of one year; a slice has its part of it
};

StoredSurface made(quotes::Instant as_of, const std::vector<Spec>& specs) {
  StoredSurface stored{{as_of, kClock}, {"HALYRD", 100.0, {}}};
  for (const auto& spec : specs) {
    const auto expiry = kFriday + spec.ahead;
    const double t = market::year_fraction(as_of, expiry);
    auto backbone = spec.at_a_year;
    backbone.theta *= t;
    backbone.psi *= t;
    stored.surface.slices.push_back({expiry, t, spec.forward, 0.99, backbone, -0.3, 0.3});
  }
  return stored;
}

std::vector<GridNode> nodes_of(const StoredSurface& stored, GridOptions options = {}) {
  GridInputs inputs{stored.as_of.instant, stored.as_of.clock, {}, {}, false};
  inputs.used_k.resize(stored.surface.slices.size());
  return sample_grid(stored.surface, inputs, options);
}

UnderlyingChange compared(const StoredSurface& before, const StoredSurface& now,
                          const TermNights& past = {}, const CompareOptions& options = {}) {
  return compare_underlying("HALYRD", {&before, false, true, {}}, {&now, false, true, {}},
                            nodes_of(now), past, options);
}

constexpr surface::SliceParameters kFlat{0.04, 0, 0}, kSmile{0.04, -0.4, 0.2};

TEST(CompareUnderlying, PartsAddUpToTheChangeAtEqualStrike) {
  const auto before = made(kFriday, {{days{20}, 100, kSmile}, {days{98}, 101, {0.05, -0.3, 0.3}}});
  const auto now =
      made(kMonday, {{days{20}, 103, {0.05, -0.6, 0.25}}, {days{98}, 104, {0.045, -0.35, 0.25}}});
  const auto change = compared(before, now);
  ASSERT_EQ(change.nodes.size(), nodes_of(now).size());
  for (const auto& n : change.nodes) {
    const auto& p = n.parts;
    const double own = p.level + p.skew + p.curvature + p.rest;
    EXPECT_NEAR(n.move, own, kRounding);
    EXPECT_NEAR(n.change, own + p.roll_down, kRounding);
    EXPECT_NEAR(n.change_at_strike, own + p.roll_down + p.forward, kRounding);
    EXPECT_NEAR(n.node.vol - n.vol_old, n.change, kRounding);
    const auto& old = before.surface;
    const bool first = n.node.expiry == kFriday + days{20};
    const double t = old.slices[first ? 0 : 1].year_fraction;
    EXPECT_NEAR(n.vol_old, surface::vol_at(old, n.k, t), kRounding);
    EXPECT_NEAR(n.change_at_strike,
                n.node.vol - surface::vol_at(old, std::log(n.node.strike / (first ? 100 : 101)), t),
                kRounding);
  }
}

TEST(CompareUnderlying, FlatShiftIsLevelAlone) {
  const auto change =
      compared(made(kFriday, {{days{98}, 100, kFlat}}),
               made(kMonday, {{days{98}, 105, {0.0625, 0, 0}}}), {}, {.deviations = 5});
  ASSERT_FALSE(change.nodes.empty());
  for (const auto& n : change.nodes) {
    EXPECT_NEAR(n.parts.level, 0.05, kRounding);
    for (const double other :
         {n.parts.forward, n.parts.roll_down, n.parts.skew, n.parts.curvature, n.parts.rest})
      EXPECT_NEAR(other, 0, kRounding);
    // 95 days at 20 %: moneyness 0.5 and 0.6 are 6.8 and 5.006 deviations away.
    EXPECT_EQ(n.near, n.node.point > 0.65) << n.node.point;
    EXPECT_EQ(n.sign_off, n.near ? SignOff::tolerance : SignOff::none);
  }
  EXPECT_EQ(change.to_sign_off(), static_cast<std::int64_t>(change.nodes.size()) - 2);
}

TEST(CompareUnderlying, SteeperSkewLeavesTheLevelAndRaisesLowStrikes) {
  const auto before = made(kFriday, {{days{98}, 100, kSmile}});
  const auto now = made(kFriday + 1s, {{days{98}, 100, {0.04, -0.8, 0.2}}});
  for (const auto& n : compared(before, now).nodes) {
    EXPECT_NEAR(n.parts.level, 0, 1e-9);  // a second of roll
    EXPECT_EQ(n.parts.skew > 0, n.k < 0);
  }
}

TEST(CompareUnderlying, WithinADeviationThePartsLeaveAlmostNothingAndAtItNothing) {
  const auto before = made(kFriday, {{days{98}, 100, kSmile}});
  const auto now = made(kFriday + 1s, {{days{98}, 100, {0.05, -0.7, 0.3}}});
  const double s0 =
      std::sqrt(surface::point_at(before.surface, 0, now.surface.slices[0].year_fraction).w);
  GridOptions grid;
  grid.axis = Axis::log_moneyness;
  grid.points = {-s0, 0, s0, 3 * s0};
  const auto change = compare_underlying("HALYRD", {&before, false, true, {}},
                                         {&now, false, true, {}}, nodes_of(now, grid), {}, {});
  ASSERT_EQ(change.nodes.size(), 4U);
  for (std::size_t i = 0; i < 3; ++i) EXPECT_NEAR(change.nodes[i].parts.rest, 0, kRounding);
  // Beyond it skew and curvature are those at one deviation.
  EXPECT_NEAR(change.nodes[3].parts.skew, change.nodes[2].parts.skew, kRounding);
  EXPECT_NEAR(change.nodes[3].parts.curvature, change.nodes[2].parts.curvature, kRounding);
}

TEST(CompareUnderlying, ForwardThatMovesUnderTheSameSmileIsTheForwardPart) {
  const auto before = made(kFriday, {{days{98}, 100, kSmile}});
  const auto now = made(kFriday + 1s, {{days{98}, 106, kSmile}});
  for (const auto& n : compared(before, now).nodes) {
    EXPECT_NEAR(n.change, 0, 1e-7);  // a second of roll
    EXPECT_NEAR(n.change_at_strike, n.parts.forward, 1e-7);
    EXPECT_GT(std::abs(n.parts.forward), 1e-4);
  }
}

TEST(CompareUnderlying, SurfaceThatStaysInRemainingTimeOnlyRollsDown) {
  // Volatility at the money 20 % at 20 days and 30 % at 98 days.
  const auto before =
      made(kFriday, {{days{20}, 100, {0.04, -0.4, 0.2}}, {days{98}, 100, {0.09, -0.4, 0.2}}});
  // Tonight's only slice is the old surface at 95 days, which at equal k is linear in time.
  const double t = market::year_fraction(kMonday, kFriday + days{98});
  auto now = made(kMonday, {{days{98}, 100, kFlat}});
  now.surface.slices[0].backbone = {surface::point_at(before.surface, 0, t).w, 0, 0};
  const auto change = compared(before, now);
  const auto at_the_money = std::find_if(change.nodes.begin(), change.nodes.end(),
                                         [](const auto& n) { return n.k == 0; });
  ASSERT_NE(at_the_money, change.nodes.end());
  EXPECT_LT(at_the_money->parts.roll_down, -1e-4);
  EXPECT_NEAR(at_the_money->move, 0, kRounding);
  EXPECT_EQ(at_the_money->sign_off, SignOff::none);
}

TEST(CompareUnderlying, TenorIsComparedWithTheSameTenor) {
  const auto before = made(kFriday, {{days{20}, 100, kFlat}, {days{98}, 100, {0.09, 0, 0}}});
  const auto now = made(kMonday, {{days{20}, 100, kFlat}, {days{98}, 100, {0.09, 0, 0}}});
  GridOptions grid;
  grid.tenors = {{1, market::TenorUnit::month}};
  grid.tenor_words = {"1M"};
  const auto change = compare_underlying("HALYRD", {&before, false, true, {}},
                                         {&now, false, true, {}}, nodes_of(now, grid), {}, {});
  std::size_t tenors = 0;
  for (const auto& n : change.nodes) {
    if (n.node.tenor.empty()) continue;
    ++tenors;
    const double t = market::year_fraction(
        kFriday, market::add_tenor(kFriday, {1, market::TenorUnit::month}, kClock));
    EXPECT_NEAR(n.vol_old, surface::vol_at(before.surface, n.k, t), kRounding);
  }
  EXPECT_GT(tenors, 0U);
}

TEST(CompareUnderlying, ExpiriesThatComeAndGoAreNamedAndExpiredOnesAreNot) {
  const auto before =
      made(kFriday, {{days{2}, 100, kFlat}, {days{20}, 100, kFlat}, {days{98}, 100, kFlat}});
  const auto now = made(kMonday, {{days{27}, 100, kFlat}, {days{98}, 100, kFlat}});
  const auto change = compared(before, now);
  EXPECT_EQ(change.new_expiries, std::vector{kFriday + days{27}});
  EXPECT_EQ(change.vanished_expiries, std::vector{kFriday + days{20}});
  for (const auto& n : change.nodes) EXPECT_EQ(n.node.expiry, kFriday + days{98});
}

TEST(CompareUnderlying, SideWithoutASurfaceIsNamedForWhatItIs) {
  const auto one = made(kFriday, {{days{98}, 100, kFlat}});
  const ComparedSide has{&one, false, true, {}}, refused{nullptr, false, true, {}},
      unknown{nullptr, false, false, {}};
  const auto state = [](const ComparedSide& a, const ComparedSide& b) {
    return compare_underlying("HALYRD", a, b, {}, {}, {}).state;
  };
  EXPECT_EQ(state(unknown, has), ChangeState::new_underlying);
  EXPECT_EQ(state(has, unknown), ChangeState::vanished_underlying);
  EXPECT_EQ(state(has, refused), ChangeState::refused);
  EXPECT_EQ(state(refused, refused), ChangeState::compared);
}

TEST(CompareUnderlying, EqualPrintsOfEveryExpiryAheadAreStale) {
  const auto before = made(kFriday, {{days{20}, 100, kFlat}, {days{98}, 100, kFlat}});
  const auto now = made(kMonday, {{days{20}, 100, kFlat}, {days{98}, 100, kFlat}});
  const std::vector<ExpiryPrint> old{
      {kFriday + days{2}, "aa"}, {kFriday + days{20}, "bb"}, {kFriday + days{98}, "cc"}};
  auto prints = old;
  const auto state = [&](bool carried) {
    return compare_underlying("HALYRD", {&before, false, true, old}, {&now, carried, true, prints},
                              {}, {}, {})
        .state;
  };
  EXPECT_EQ(state(false), ChangeState::stale);
  EXPECT_EQ(state(true), ChangeState::carried);
  prints[0].print = "expired, so it does not count";
  EXPECT_EQ(state(false), ChangeState::stale);
  prints[2].print = "dd";
  EXPECT_EQ(state(false), ChangeState::compared);
}

TEST(CompareUnderlying, WithoutPrintsTheSameNumbersOnALaterNightAreStale) {
  const auto before = made(kFriday, {{days{98}, 100, kSmile}});
  auto now = before;
  now.as_of.instant = kMonday;
  now.surface.slices[0].year_fraction = market::year_fraction(kMonday, kFriday + days{98});
  EXPECT_EQ(compared(before, now).state, ChangeState::stale);
  now.surface.slices[0].backbone.theta *= 1.0000001;
  EXPECT_EQ(compared(before, now).state, ChangeState::compared);
}

TEST(CompareUnderlying, MoveIsJudgedByTheTypicalOneOnceEnoughNightsAreKnown) {
  const auto before = made(kFriday, {{days{98}, 100, kFlat}});
  const auto now = made(kMonday, {{days{98}, 100, {0.21 * 0.21, 0, 0}}});  // one point up
  // From 20 % to 20.1 % and back: typically 0.1 points.
  TermNights past;
  for (int i = 0; i < 10; ++i) past.push_back({{0.25, i % 2 == 0 ? 0.2 : 0.201}});
  CompareOptions options;
  options.tolerance = 0.03;
  options.times_typical = 8;
  options.least_nights = 10;
  const auto why = [&] { return compared(before, now, past, options).nodes[3].sign_off; };
  EXPECT_EQ(why(), SignOff::history);
  options.tolerance = 0.005;
  EXPECT_EQ(why(), SignOff::both);
  options.times_typical = 0;
  EXPECT_EQ(why(), SignOff::tolerance);
  options = {.tolerance = 0.03, .times_typical = 11, .least_nights = 10};
  EXPECT_EQ(why(), SignOff::none);
  options.times_typical = 8;
  past.pop_back();
  EXPECT_EQ(why(), SignOff::none);
}

TEST(TypicalChange, IsTheMedianOfTheChangesInVolatilityAtThatTime) {
  // Worked by hand: 0.20, 0.21, 0.18, 0.18 changes by 0.01, 0.03, 0: the median is 0.01.
  const TermNights flat{{{0.5, 0.20}}, {{0.5, 0.21}}, {{0.5, 0.18}}, {{0.5, 0.18}}};
  EXPECT_NEAR(typical_change(flat, 2), 0.01, kRounding);
  // Half way between 0.04 * 0.5 and 0.09 * 1 of total variance: sqrt(0.055 / 0.75).
  const TermNights two{{{0.5, 0.2}, {1, 0.3}}, {{0.75, 0.25}}};
  EXPECT_NEAR(typical_change(two, 0.75), std::sqrt(0.055 / 0.75) - 0.25, kRounding);
  EXPECT_TRUE(std::isnan(typical_change({}, 1)));
  EXPECT_TRUE(std::isnan(typical_change({{{0.5, 0.2}}}, 1)));
}

TEST(CompareOptions, RangesAreChecked) {
  EXPECT_EQ(CompareOptions{}.problem(), std::nullopt);
  EXPECT_TRUE((CompareOptions{.tolerance = 0}).problem());
  EXPECT_TRUE((CompareOptions{.times_typical = -1}).problem());
  EXPECT_TRUE((CompareOptions{.deviations = 0}).problem());
  EXPECT_TRUE((CompareOptions{.least_nights = 1}).problem());
  EXPECT_TRUE((CompareOptions{.least_nights = 30, .most_nights = 20}).problem());
}

TEST(ChangesLines, EveryLineHasTheCellsOfTheHeader) {
  const auto before = made(kFriday, {{days{20}, 100, kSmile}, {days{98}, 100, kSmile}});
  const auto now = made(kMonday, {{days{27}, 100, kSmile}, {days{98}, 101, kSmile}});
  auto change = compared(before, now);
  change.underlying = "=A";  // guarded, and still one cell
  const std::string text = changes_lines(change, Axis::moneyness, kClock);
  const auto commas = [](std::string_view line) {
    return std::count(line.begin(), line.end(), ',');
  };
  const auto header = commas(kChangesHeader);
  std::size_t lines = 0;
  for (std::size_t at = 0; at < text.size(); ++lines) {
    const auto end = text.find('\n', at);
    const std::string line = text.substr(at, end - at);
    EXPECT_EQ(commas(line), header) << line;
    EXPECT_EQ(line.rfind("'=A,", 0), 0U) << line;
    EXPECT_EQ(line.find("nan"), std::string::npos) << line;
    at = end + 1;
  }
  EXPECT_EQ(lines, change.nodes.size() + 2);
  EXPECT_NE(text.find("'=A,new-expiry,2031-04-10T16:00:00-05:00,"), std::string::npos);
  EXPECT_NE(text.find("'=A,vanished-expiry,2031-04-03T16:00:00-05:00,"), std::string::npos);
}

}  // namespace
}  // namespace duskgrid::publish
