#include "publish/grid.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "market/day_count.h"
#include "pricing/black.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;

// A handful of roundings in ln, exp and square root of numbers of order 1: relative.
constexpr double kRounding = 1e-14;
// The root of N(d1) = delta is bracketed to 2^-50 of k; N(d1) moves by under 10 a unit of k here.
constexpr double kDeltaRoot = 1e-13;

const quotes::Instant kAsOf = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;

quotes::Instant after_days(int days) { return kAsOf + std::chrono::days{days}; }

surface::Slice made_slice(int days, double forward, double discount, surface::SliceParameters p,
                          double k_low, double k_high) {
  const auto expiry = after_days(days);
  return {expiry, market::year_fraction(kAsOf, expiry), forward, discount, p, k_low, k_high};
}

surface::Surface made_surface() {
  return {"HALYRD",
          100,
          {made_slice(91, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2),
           made_slice(365, 104, 0.96, {0.04, -0.4, 0.3}, -0.5, 0.3)}};
}

GridInputs made_inputs(const surface::Surface& surface) {
  GridInputs inputs{kAsOf, {}, {}, {80, 95, 105}, false};
  inputs.used_k.resize(surface.slices.size());
  return inputs;
}

std::vector<GridNode> sampled(const GridOptions& options) {
  const auto surface = made_surface();
  return sample_grid(surface, made_inputs(surface), options);
}

GridOptions on(Axis axis, std::vector<double> points = {}) {
  GridOptions options;
  options.axis = axis;
  options.points = std::move(points);
  return options;
}

GridOptions with_tenor(GridOptions options, const std::string& word) {
  options.tenors.push_back(*market::parse_tenor(word));
  options.tenor_words.push_back(word);
  return options;
}

std::vector<GridNode> at_time(const std::vector<GridNode>& grid, quotes::Instant expiry,
                              const std::string& tenor = "") {
  std::vector<GridNode> out;
  std::copy_if(grid.begin(), grid.end(), std::back_inserter(out),
               [&](const GridNode& n) { return n.expiry == expiry && n.tenor == tenor; });
  return out;
}

constexpr Axis kAxes[] = {Axis::strike, Axis::moneyness, Axis::log_moneyness, Axis::deviations,
                          Axis::delta};

TEST(AxisWord, EveryAxisIsReadFromItsWord) {
  for (const Axis axis : kAxes) EXPECT_EQ(parse_axis(word(axis)), axis);
  EXPECT_EQ(parse_axis("Moneyness"), std::nullopt);
  EXPECT_EQ(parse_axis(""), std::nullopt);
}

TEST(SupportWord, EverySupportHasItsOwn) {
  EXPECT_EQ(word(Support::carried), "carried");
  EXPECT_EQ(word(Support::extrapolated), "extrapolated");
  EXPECT_EQ(word(Support::observed), "observed");
  EXPECT_EQ(word(Support::interpolated), "interpolated");
}

TEST(SampleGrid, EveryNodeCarriesItsSliceAndTheSurfaceVol) {
  const auto surface = made_surface();
  for (const Axis axis : kAxes) {
    SCOPED_TRACE(word(axis));
    for (const auto& node : sampled(on(axis))) {
      const auto& slice = surface.slices[node.expiry == surface.slices[0].expiry ? 0 : 1];
      EXPECT_EQ(node.expiry, slice.expiry);
      EXPECT_EQ(node.tenor, "");
      EXPECT_EQ(node.year_fraction, slice.year_fraction);
      EXPECT_EQ(node.forward, slice.forward);
      EXPECT_EQ(node.discount_factor, slice.discount_factor);
      const double k = std::log(node.strike / node.forward);
      const double vol = surface::vol_at(surface, k, node.year_fraction);
      EXPECT_NEAR(node.vol, vol, kRounding * vol);
    }
  }
}

TEST(SampleGrid, NodesAreByTimeThenStrike) {
  for (const Axis axis : kAxes) {
    const auto grid = sampled(with_tenor(with_tenor(on(axis), "2Y"), "1M"));
    EXPECT_TRUE(std::is_sorted(grid.begin(), grid.end(), [](const auto& a, const auto& b) {
      return std::pair(a.expiry, a.strike) < std::pair(b.expiry, b.strike);
    })) << word(axis);
  }
}

TEST(SampleGrid, ForwardIsANodeOnceAtEveryTimeOnEveryAxis) {
  for (const Axis axis : kAxes) {
    // With the points that have it, and with points that do not.
    for (const std::vector<double>& points : {std::vector<double>{}, {0.31, 0.77}}) {
      const auto grid = sampled(with_tenor(on(axis, points), "6M"));
      for (const auto& when : {after_days(91), after_days(365)})
        EXPECT_EQ(std::count_if(
                      grid.begin(), grid.end(),
                      [&](const GridNode& n) { return n.expiry == when && n.strike == n.forward; }),
                  1)
            << word(axis);
      EXPECT_EQ(
          std::count_if(grid.begin(), grid.end(),
                        [](const GridNode& n) { return n.tenor == "6M" && n.strike == n.forward; }),
          1)
          << word(axis);
    }
  }
}

TEST(SampleGrid, PointGivenTwiceIsOneNode) {
  EXPECT_EQ(at_time(sampled(on(Axis::moneyness, {0.9, 1, 0.9, 1})), after_days(91)).size(), 2U);
}

TEST(SampleGrid, StrikeAxisTakesStrikesAsGivenAndTheForward) {
  const auto nodes = at_time(sampled(on(Axis::strike, {110, 90})), after_days(91));
  ASSERT_EQ(nodes.size(), 3U);
  EXPECT_EQ(nodes[0].strike, 90);
  EXPECT_EQ(nodes[1].strike, 101);
  EXPECT_EQ(nodes[2].strike, 110);
  for (const auto& node : nodes) EXPECT_EQ(node.point, node.strike);
}

TEST(SampleGrid, StrikeAxisWithoutPointsTakesTheListedStrikes) {
  const auto nodes = at_time(sampled(on(Axis::strike)), after_days(365));
  ASSERT_EQ(nodes.size(), 4U);
  EXPECT_EQ(nodes[0].strike, 80);
  EXPECT_EQ(nodes[1].strike, 95);
  EXPECT_EQ(nodes[2].strike, 104);
  EXPECT_EQ(nodes[3].strike, 105);
}

TEST(SampleGrid, MoneynessIsStrikeOverForward) {
  for (const auto& node : sampled(on(Axis::moneyness, {0.8, 1, 1.3})))
    EXPECT_NEAR(node.strike, node.point * node.forward, kRounding * node.strike);
}

TEST(SampleGrid, LogMoneynessIsTheLogarithmOfStrikeOverForward) {
  for (const auto& node : sampled(on(Axis::log_moneyness, {-0.4, 0, 0.25})))
    EXPECT_NEAR(std::log(node.strike / node.forward), node.point, kRounding);
}

TEST(SampleGrid, DeviationsAreInAtTheMoneyTotalVols) {
  const auto surface = made_surface();
  for (const auto& node : sampled(on(Axis::deviations, {-3, 0, 1.5}))) {
    const double total_vol = std::sqrt(surface::point_at(surface, 0, node.year_fraction).w);
    EXPECT_NEAR(std::log(node.strike / node.forward), node.point * total_vol, kRounding);
  }
}

double forward_delta(const GridNode& node) {
  const double s = node.vol * std::sqrt(node.year_fraction);
  return pricing::normal_cdf(std::log(node.forward / node.strike) / s + 0.5 * s);
}

TEST(SampleGrid, DeltaNodesSolveForTheirForwardCallDelta) {
  const auto grid = sampled(with_tenor(on(Axis::delta), "2Y"));
  // Three times, the usual points of which none is the forward, and the forward.
  EXPECT_EQ(grid.size(), 3 * (default_points(Axis::delta).size() + 1));
  for (const auto& node : grid) EXPECT_NEAR(forward_delta(node), node.point, kDeltaRoot);
}

TEST(SampleGrid, DeltasFallAsStrikesRise) {
  const auto nodes = at_time(sampled(on(Axis::delta, {0.1, 0.5, 0.9})), after_days(91));
  ASSERT_EQ(nodes.size(), 4U);
  EXPECT_EQ(nodes.front().point, 0.9);
  EXPECT_EQ(nodes.back().point, 0.1);
}

TEST(SampleGrid, DeltaOutOfReachIsLeftOut) {
  // At 40 deviations N(d1) is still above this.
  const auto nodes = at_time(sampled(on(Axis::delta, {1e-320, 0.5})), after_days(91));
  ASSERT_EQ(nodes.size(), 2U);
  EXPECT_EQ(nodes[0].strike, nodes[0].forward);
  EXPECT_EQ(nodes[1].point, 0.5);
}

TEST(SampleGrid, TenorLiesAtAsOfPlusTenorWithCarriedForward) {
  const auto surface = made_surface();
  const auto grid = sampled(with_tenor(on(Axis::moneyness, {1}), "6M"));
  const quotes::Instant expiry = std::chrono::sys_days{std::chrono::year{2031} / 9 / 14} + 21h;
  const auto nodes = at_time(grid, expiry, "6M");
  ASSERT_EQ(nodes.size(), 1U);
  const double t = market::year_fraction(kAsOf, expiry);
  EXPECT_EQ(nodes[0].year_fraction, t);
  EXPECT_EQ(nodes[0].forward, surface::carried_at(surface, t).forward);
  EXPECT_EQ(nodes[0].discount_factor, surface::carried_at(surface, t).discount_factor);
  EXPECT_NEAR(nodes[0].vol, surface::vol_at(surface, 0, t), kRounding);
}

TEST(SampleGrid, ListedExpiryComesBeforeATenorOfTheSameInstantAndAgrees) {
  const auto grid = sampled(with_tenor(on(Axis::moneyness, {0.9, 1}), "365D"));
  ASSERT_EQ(grid.size(), 6U);
  EXPECT_EQ(grid[2].tenor, "");
  EXPECT_EQ(grid[4].tenor, "365D");
  for (int i = 2; i < 4; ++i) {
    EXPECT_EQ(grid[i].expiry, grid[i + 2].expiry);
    EXPECT_EQ(grid[i].strike, grid[i + 2].strike);
    EXPECT_EQ(grid[i].vol, grid[i + 2].vol);
    EXPECT_EQ(grid[i].forward, grid[i + 2].forward);
  }
}

TEST(SampleGrid, TenorBeyondTheRangeOfNumbersIsLeftOut) {
  auto surface = made_surface();
  surface.slices[0].forward = 1e5;
  // Carried on, the forward shrinks by 1e5 every 274 days: below any double within 60 years.
  surface.slices[1].forward = 1;
  const auto grid = sample_grid(surface, made_inputs(surface),
                                with_tenor(with_tenor(on(Axis::moneyness), "999Y"), "2Y"));
  EXPECT_FALSE(grid.empty());
  for (const auto& node : grid) {
    EXPECT_NE(node.tenor, "999Y");
    EXPECT_GT(node.forward, 0);
    EXPECT_GT(node.strike, 0);
    EXPECT_GT(node.vol, 0);
  }
}

// Support of the nodes at the first expiry, which was quoted from k = -0.3 to 0.2.
std::vector<Support> supports(std::vector<double> used_k, std::vector<double> points) {
  const auto surface = made_surface();
  auto inputs = made_inputs(surface);
  inputs.used_k[0] = std::move(used_k);
  const auto grid = sample_grid(surface, inputs, on(Axis::log_moneyness, std::move(points)));
  std::vector<Support> out;
  for (const auto& node : at_time(grid, after_days(91))) out.push_back(node.support);
  return out;
}

TEST(GridSupport, NodeNearAUsedQuoteIsObserved) {
  EXPECT_EQ(supports({0.01}, {-0.1, 0, 0.1}),
            (std::vector{Support::interpolated, Support::observed, Support::interpolated}));
}

TEST(GridSupport, QuoteHalfWayBetweenTwoNodesIsNearNeither) {
  EXPECT_EQ(supports({0.0625}, {-0.125, 0, 0.125}),
            (std::vector{Support::interpolated, Support::interpolated, Support::interpolated}));
}

TEST(GridSupport, EndNodeReachesAsFarOutAsIn) {
  // Reach of the last node is 0.05 either way.
  EXPECT_EQ(supports({0.14}, {0, 0.1}), (std::vector{Support::interpolated, Support::observed}));
  EXPECT_EQ(supports({0.16}, {0, 0.1}),
            (std::vector{Support::interpolated, Support::interpolated}));
}

TEST(GridSupport, LoneNodeIsObservedWhereverItsQuotesAre) {
  EXPECT_EQ(supports({0.2}, {0}), std::vector{Support::observed});
}

TEST(GridSupport, NodeBeyondTheQuotedStrikesIsExtrapolated) {
  EXPECT_EQ(supports({-0.3, 0, 0.2}, {-0.31, -0.3, 0, 0.2, 0.21}),
            (std::vector{Support::extrapolated, Support::observed, Support::observed,
                         Support::observed, Support::extrapolated}));
}

std::vector<Support> tenor_supports(const std::string& tenor, std::vector<double> points) {
  const auto surface = made_surface();
  auto inputs = made_inputs(surface);
  inputs.used_k = {{-0.3, 0, 0.2}, {-0.5, 0, 0.3}};
  const auto grid =
      sample_grid(surface, inputs, with_tenor(on(Axis::log_moneyness, std::move(points)), tenor));
  std::vector<Support> out;
  for (const auto& node : grid)
    if (node.tenor == tenor) out.push_back(node.support);
  return out;
}

TEST(GridSupport, TenorBetweenExpiriesIsInterpolatedWithinTheRangeDrawnBetweenThem) {
  // 228 days, half way: quoted from -0.4 to 0.25.
  EXPECT_EQ(tenor_supports("228D", {-0.41, -0.39, 0, 0.24, 0.26}),
            (std::vector{Support::extrapolated, Support::interpolated, Support::interpolated,
                         Support::interpolated, Support::extrapolated}));
}

TEST(GridSupport, TenorOutsideTheListedExpiriesIsExtrapolated) {
  EXPECT_EQ(tenor_supports("1M", {0}), std::vector{Support::extrapolated});
  EXPECT_EQ(tenor_supports("2Y", {0}), std::vector{Support::extrapolated});
}

TEST(GridSupport, EarlierNightsSurfaceIsCarriedEverywhere) {
  const auto surface = made_surface();
  auto inputs = made_inputs(surface);
  inputs.carried = true;
  inputs.used_k.clear();
  for (const auto& node : sample_grid(surface, inputs, with_tenor(on(Axis::moneyness), "2Y")))
    EXPECT_EQ(node.support, Support::carried);
}

TEST(GridOptionsProblem, DefaultsAndUsualPointsHaveNone) {
  EXPECT_EQ(GridOptions{}.problem(), std::nullopt);
  for (const Axis axis : kAxes) EXPECT_EQ(on(axis, default_points(axis)).problem(), std::nullopt);
}

TEST(GridOptionsProblem, PointsOffTheirAxisAreNamed) {
  for (const Axis axis : {Axis::strike, Axis::moneyness, Axis::delta}) {
    EXPECT_NE(on(axis, {0}).problem(), std::nullopt) << word(axis);
    EXPECT_NE(on(axis, {-0.5}).problem(), std::nullopt) << word(axis);
  }
  EXPECT_NE(on(Axis::delta, {1}).problem(), std::nullopt);
  EXPECT_NE(on(Axis::log_moneyness, {HUGE_VAL}).problem(), std::nullopt);
  EXPECT_NE(on(Axis::deviations, {std::nan("")}).problem(), std::nullopt);
  EXPECT_EQ(on(Axis::deviations, {-2, 0}).problem(), std::nullopt);
}

TEST(GridOptionsProblem, TooManyPointsAreNamed) {
  EXPECT_EQ(on(Axis::moneyness, std::vector<double>(2000, 1.0)).problem(), std::nullopt);
  EXPECT_NE(on(Axis::moneyness, std::vector<double>(2001, 1.0)).problem(), std::nullopt);
}

}  // namespace
}  // namespace duskgrid::publish
