#include "market/parity.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <random>

#include "pricing/black.h"

namespace duskgrid::market {
namespace {

// Means and clamps of a dozen numbers of the size of the forward, relative.
constexpr double kRounding = 1e-12;

struct Made {
  double t = 0.25, forward = 4000, rate = 0.03, vol = 0.2, half_spread = 0.5;
  int strikes = 41;
  double gap = 25;
};

// Black-priced pairs around the forward, each mid moved inside its interval by up to `noise`
// half-widths.
ExpiryPairs made_pairs(const Made& m, double noise = 0, unsigned seed = 1) {
  std::mt19937 random(seed);
  std::uniform_real_distribution<double> shift(-noise, noise);
  const double discount = std::exp(-m.rate * m.t);
  ExpiryPairs out{.year_fraction = m.t, .pairs = {}, .given_forward = {}};
  for (int i = 0; i < m.strikes; ++i) {
    const double strike = std::round(m.forward / m.gap) * m.gap + (i - m.strikes / 2) * m.gap;
    const auto price = [&](quotes::PutCall side) {
      return pricing::black_price({side, m.forward, strike, discount}, m.vol * std::sqrt(m.t));
    };
    const double call = price(quotes::PutCall::call), put = price(quotes::PutCall::put);
    const double width = 2 * m.half_spread;
    const double middle = call - put + width * shift(random);
    out.pairs.push_back({strike, middle - width, middle + width, call + put});
  }
  return out;
}

ForwardEstimate one(const ExpiryPairs& expiry, const KnownMarket& known = {}) {
  const auto all = estimate_forwards(std::span(&expiry, 1), known, {});
  EXPECT_TRUE(all.at(0));
  return *all.at(0);
}

double farthest_from(const ForwardEstimate& e, double forward) {
  return std::max(e.highest_forward - forward, forward - e.lowest_forward);
}

TEST(EstimateForwards, ExactPairsWithTheCurveGivenReturnTheForward) {
  const Made m{.half_spread = 1e-6};
  const auto e =
      one(made_pairs(m), {.spot = {}, .carry = {}, .curve = ZeroCurve::make({{1, 0.03}}).value()});
  // The rate is only drawn to the curve: its rest error times t times distance to the money.
  constexpr double kForward = 1e-6;
  EXPECT_NEAR(e.forward, 4000, kForward);
  EXPECT_NEAR(e.zero_rate, 0.03, 1e-8);  // spread 2e-6 over 1000 of strikes and a quarter year
  EXPECT_EQ(e.breaks, 0);
  EXPECT_GT(e.pairs, 2);
  EXPECT_EQ(e.source, ForwardSource::parity);
  EXPECT_FALSE(e.carry);
}

TEST(EstimateForwards, ForwardLiesInsideTheNearIntervalsWhateverTheNoise) {
  for (unsigned seed = 1; seed <= 200; ++seed) {
    const auto e = one(made_pairs({}, 0.95, seed));
    ASSERT_LE(e.lowest_forward, e.highest_forward) << seed;
    EXPECT_GE(e.forward, e.lowest_forward) << seed;
    EXPECT_LE(e.forward, e.highest_forward) << seed;
    EXPECT_EQ(e.breaks, 0) << seed;
  }
}

TEST(EstimateForwards, TrueForwardIsFoundWithinTheSpreads) {
  for (unsigned seed = 1; seed <= 200; ++seed) {
    const auto e = one(made_pairs({}, 0.95, seed));
    // The intersection holds the truth up to the error of the discount over half a deviation of
    // strikes.
    EXPECT_LE(std::abs(e.forward - 4000), farthest_from(e, 4000)) << seed;
    EXPECT_LT(std::abs(e.forward - 4000), 1.0) << seed;  // one interval's half-width
  }
}

TEST(EstimateForwards, LongExpiryTellsItsOwnRate) {
  const auto e = one(made_pairs({.t = 2, .rate = 0.04, .half_spread = 0.01}));
  // Half-spread 0.02 over +-500 of strikes, 2 years: a standard error near 1e-5.
  EXPECT_NEAR(e.zero_rate, 0.04, 1e-4);
}

TEST(EstimateForwards, ShortExpiryCannotInventARate) {
  const std::vector<ExpiryPairs> expiries{
      made_pairs({.t = 0.003, .half_spread = 2, .strikes = 9}, 0.9, 5),
      made_pairs({.t = 1, .half_spread = 0.05})};
  const auto e = estimate_forwards(expiries, {}, {});
  // A regression of the short one alone could say anything up to +-10 and more; one tolerance
  // allows 0.005.
  EXPECT_NEAR(e[0]->zero_rate, 0.03, 0.005);
}

TEST(EstimateForwards, OneWildPairMovesTheRateLittleAndCountsAsABreak) {
  auto expiry = made_pairs({});
  auto& pair = expiry.pairs[21];  // the strike next to the money
  pair.low += 30;
  pair.high += 30;
  const auto e = one(expiry);
  EXPECT_NEAR(e.forward, 4000, 1.0);  // one interval's half-width
  EXPECT_NEAR(e.zero_rate, 0.03, 0.005);
  EXPECT_EQ(e.breaks, 1);
  EXPECT_GT(e.lowest_forward, e.highest_forward);
}

TEST(EstimateForwards, ContradictingPairsLeaveTheForwardThatBreaksFewest) {
  ExpiryPairs expiry{.year_fraction = 0.5, .pairs = {}, .given_forward = {}};
  for (int i = 0; i < 5; ++i) {
    const double strike = 98.0 + i;
    const double value = (i == 2 ? 103.0 : 100.0) - strike;
    expiry.pairs.push_back({strike, value - 0.1, value + 0.1, 20});
  }
  const auto e =
      one(expiry, {.spot = {}, .carry = {}, .curve = ZeroCurve::make({{1, 0.0}}).value()});
  EXPECT_NEAR(e.forward, 100, 0.1 + 0.05);  // an end of the four agreeing intervals, and rate error
  EXPECT_EQ(e.breaks, 1);
}

TEST(EstimateForwards, ForwardGivenOutrightIsKept) {
  auto expiry = made_pairs({});
  expiry.given_forward = 3990.5;
  const auto e = one(expiry);
  EXPECT_EQ(e.forward, 3990.5);
  EXPECT_EQ(e.source, ForwardSource::given);
  EXPECT_EQ(e.pairs, 0);
  EXPECT_EQ(e.breaks, 0);
}

TEST(EstimateForwards, CarryIsTheYieldThatTakesSpotToForward) {
  const auto e = one(made_pairs({.half_spread = 1e-6}), {.spot = 3980, .carry = {}, .curve = {}});
  ASSERT_TRUE(e.carry);
  EXPECT_NEAR(3980 * std::exp((e.zero_rate - *e.carry) * 0.25), e.forward, 3980 * kRounding);
}

TEST(EstimateForwards, ExpiryWithoutPairsUsesSpotAndTheNearestCarry) {
  const std::vector<ExpiryPairs> expiries{made_pairs({.half_spread = 0.001}),
                                          {.year_fraction = 0.5, .pairs = {}, .given_forward = {}}};
  const auto e = estimate_forwards(expiries, {.spot = 3980, .carry = {}, .curve = {}}, {});
  ASSERT_TRUE(e[0] && e[1]);
  EXPECT_EQ(e[1]->source, ForwardSource::curve);
  EXPECT_EQ(e[1]->pairs, 0);
  EXPECT_NEAR(*e[1]->carry, *e[0]->carry, kRounding);
  EXPECT_NEAR(e[1]->forward, 3980 * std::exp((e[1]->zero_rate - *e[1]->carry) * 0.5),
              3980 * kRounding);
  EXPECT_TRUE(std::isnan(e[1]->lowest_forward));
}

TEST(EstimateForwards, StatedCarryIsUsedWhereThereAreNoPairs) {
  const ExpiryPairs expiry{.year_fraction = 0.5, .pairs = {}, .given_forward = {}};
  const auto e =
      one(expiry, {.spot = 100, .carry = 0.02, .curve = ZeroCurve::make({{1, 0.05}}).value()});
  EXPECT_NEAR(e.forward, 100 * std::exp(0.015), 100 * kRounding);
  EXPECT_NEAR(e.discount_factor, std::exp(-0.025), kRounding);
}

TEST(EstimateForwards, NoPairNoSpotNoForward) {
  const std::vector<ExpiryPairs> expiries{{.year_fraction = 0.5, .pairs = {}, .given_forward = {}}};
  EXPECT_FALSE(estimate_forwards(expiries, {}, {})[0]);
  EXPECT_TRUE(estimate_forwards({}, {}, {}).empty());
}

TEST(EstimateForwards, OnePairIsEnoughForAForward) {
  auto expiry = made_pairs({.half_spread = 0.01, .strikes = 1});
  const auto e =
      one(expiry, {.spot = {}, .carry = {}, .curve = ZeroCurve::make({{1, 0.03}}).value()});
  EXPECT_EQ(e.pairs, 1);
  EXPECT_NEAR(e.forward, 4000, 0.02);  // half an interval
}

// Early exercise bends call minus put away from the line in the wings.
TEST(EstimateForwards, AmericanPairsTellNoRate) {
  auto expiry = made_pairs({.t = 1, .rate = 0.08, .half_spread = 0.01});
  expiry.american = true;
  const auto e = one(expiry);
  EXPECT_EQ(e.zero_rate, 0.0);  // nothing known, so what is believed before any quote
  EXPECT_LE(e.pairs, ParityOptions{}.most_near_pairs);
}

TEST(ParityOptions, FirstBrokenRuleIsNamedWithItsValue) {
  EXPECT_FALSE(ParityOptions{}.problem());
  ParityOptions bad;
  bad.near_deviations = -1;
  ASSERT_TRUE(bad.problem());
  EXPECT_NE(bad.problem()->find("near_deviations = -1"), std::string::npos);
  EXPECT_TRUE(ParityOptions{.rate_tolerance_given = 0}.problem());
  EXPECT_TRUE(ParityOptions{.rate_tolerance_common = std::nan("")}.problem());
  EXPECT_TRUE(ParityOptions{.most_near_pairs = 0}.problem());
}

TEST(ForwardSource, WordsAreThoseOfTheFile) {
  EXPECT_EQ(word(ForwardSource::parity), "parity");
  EXPECT_EQ(word(ForwardSource::given), "given");
  EXPECT_EQ(word(ForwardSource::curve), "curve");
  EXPECT_EQ(word(ForwardSource::carried), "carried");
}

// A pair far out whose put copies another price used to turn the discount of its expiry, and by the
// common rate that of others.
TEST(EstimateForwards, FarStrayPairTurnsNeitherRateNorForward) {
  Made made;
  const ExpiryPairs clean = made_pairs(made);
  ExpiryPairs stray = clean;
  // Call 0.01 at 0.03, put 50.0 at 50.1 at twice the forward.
  stray.pairs.push_back({2 * made.forward, 0.01 - 50.1, 0.03 - 50.0, 50.07});
  const auto without = estimate_forwards(std::vector{clean}, {}, {});
  const auto with = estimate_forwards(std::vector{stray}, {}, {});
  ASSERT_TRUE(without[0] && with[0]);
  // One pair more moves the median by a rank, and with it the choice of the twelfth nearest pair.
  const double a_rank = made.half_spread / 1000;
  EXPECT_NEAR(with[0]->forward, without[0]->forward, a_rank);
  EXPECT_NEAR(with[0]->zero_rate, without[0]->zero_rate, kRounding);
}

TEST(EstimateForwards, TightStrayPairNearZeroDoesNotBecomeTheForward) {
  Made made;
  for (const double strike : {0.6, 1.02, 1.5, 4.0, 1e9}) {
    ExpiryPairs stray = made_pairs(made);
    stray.pairs.push_back({strike * made.forward, 0.01 - 0.05, 0.05 - 0.01, 0.06});
    std::sort(stray.pairs.begin(), stray.pairs.end(),
              [](const auto& a, const auto& b) { return a.strike < b.strike; });
    const auto found = estimate_forwards(std::vector{stray}, {}, {});
    ASSERT_TRUE(found[0]);
    EXPECT_NEAR(found[0]->forward, made.forward, made.half_spread) << strike;
  }
}

TEST(EstimateForwards, SilentExpiriesTakeTheCarryOfTheNearestThatSpeaks) {
  // Times 1 and 4 have forwards, 2 and 2.9 nothing: 2.9 is nearer to 4.
  std::vector<ExpiryPairs> expiries(4);
  const double times[] = {1, 2, 2.9, 4};
  for (int i = 0; i < 4; ++i) expiries[i].year_fraction = times[i];
  const double early = 0.02, late = 0.08;
  expiries[0].given_forward = 100 * std::exp(-early * 1);
  expiries[3].given_forward = 100 * std::exp(-late * 4);
  const auto found = estimate_forwards(expiries, {100.0, {}, *ZeroCurve::make({{1.0, 0.0}})}, {});
  EXPECT_NEAR(*found[1]->carry, early, kRounding);
  EXPECT_NEAR(*found[2]->carry, late, kRounding);
}

}  // namespace
}  // namespace duskgrid::market
