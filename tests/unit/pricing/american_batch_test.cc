#include "pricing/american_batch.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <vector>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kInfinity = std::numeric_limits<double>::infinity();
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
const AmericanInverter kInverter;
const AmericanEngine kEngine;

struct Results {
  std::vector<double> vols, european;
  std::vector<AmericanVolStatus> statuses;
  AmericanCounts counts;
};

Results inverted(const AmericanColumnTerms& terms, const std::vector<double>& strikes,
                 const std::vector<PutCall>& sides, const std::vector<double>& prices) {
  // Filled so that what is not written shows.
  Results r{std::vector<double>(prices.size(), kNaN),
            std::vector<double>(prices.size(), kNaN),
            std::vector<AmericanVolStatus>(prices.size(), AmericanVolStatus::not_converged),
            {}};
  r.counts = kInverter.invert(terms, {strikes, sides, prices}, {r.vols, r.european, r.statuses});
  return r;
}

struct Chain {
  AmericanColumnTerms terms;
  std::vector<double> strikes, prices, vols;
  std::vector<PutCall> sides;
};

Chain chain_of(const AmericanColumnTerms& terms) {
  Chain c{terms, {}, {}, {}, {}};
  for (double strike = 70; strike <= 140; strike += 5)
    for (const auto side : {PutCall::put, PutCall::call}) {
      const double vol = 0.25 - 0.2 * std::log(strike / 100);
      const auto p = kEngine.price(
          {side, terms.spot, strike, terms.rate, terms.carry_yield, terms.year_fraction}, vol);
      if (p.immediate) continue;
      c.strikes.push_back(strike);
      c.sides.push_back(side);
      c.prices.push_back(p.price);
      c.vols.push_back(vol);
    }
  return c;
}

TEST(AmericanInverter, FindsTheVolsOfAChainToItsPromise) {
  const AmericanColumnTerms all[] = {{100, 0.05, 0.02, 0.5}, {100, 0.02, 0.05, 1.5},
                                     {100, 0.04, 0.04, 0.1}, {100, 0.05, 0, 1},
                                     {100, 0, -0.02, 1},     {100, 0, 0.03, 1}};
  for (const auto& terms : all) {
    const Chain c = chain_of(terms);
    const auto r = inverted(terms, c.strikes, c.sides, c.prices);
    for (std::size_t i = 0; i < c.prices.size(); ++i) {
      ASSERT_EQ(r.statuses[i], AmericanVolStatus::ok) << c.strikes[i] << ' ' << c.prices[i];
      const AmericanTerms t{c.sides[i],         100, c.strikes[i], terms.rate, terms.carry_yield,
                            terms.year_fraction};
      const auto again = kEngine.price(t, r.vols[i]);
      EXPECT_NEAR(again.price, c.prices[i], AmericanInverter::kPromise * 100) << c.strikes[i];
      EXPECT_NEAR(again.european, r.european[i], 1e-8) << c.strikes[i];
    }
  }
}

TEST(AmericanInverter, WithoutReasonToExerciseItIsTheEuropeanInversionToTheBit) {
  const AmericanColumnTerms terms{100, 0.05, 0, 0.5};
  const std::vector<double> strikes{80, 100, 125}, prices{22.5, 6.25, 0.5};
  const std::vector<PutCall> sides(3, PutCall::call);
  const auto r = inverted(terms, strikes, sides, prices);
  for (std::size_t i = 0; i < 3; ++i) {
    const auto v = implied_vol({PutCall::call, 100 * std::exp(0.025), strikes[i], std::exp(-0.025)},
                               prices[i], 0.5);
    EXPECT_EQ(r.vols[i], v.vol);
    EXPECT_EQ(r.european[i], prices[i]);
  }
  EXPECT_EQ(r.counts.panels, 0u);
}

TEST(AmericanInverter, NamesWhatHasNoVolatility) {
  const AmericanColumnTerms terms{100, 0.05, 0.02, 0.5};
  const std::vector<double> strikes{120, 120, 120, 100, 100, -5, 100, 120, 90, 90};
  const std::vector<double> prices{20, 19.9, 120, 0, -1, 3, kNaN, kInfinity, 10, 9};
  std::vector<PutCall> sides(8, PutCall::put);
  sides.insert(sides.end(), 2, PutCall::call);
  const auto r = inverted(terms, strikes, sides, prices);
  using enum AmericanVolStatus;
  const AmericanVolStatus wanted[] = {
      immediate_exercise, below_intrinsic, above_bound, below_intrinsic, below_intrinsic,
      not_finite,         not_finite,      not_finite,  below_intrinsic, below_intrinsic};
  for (std::size_t i = 0; i < prices.size(); ++i) {
    EXPECT_EQ(r.statuses[i], wanted[i]) << i << ' ' << word(r.statuses[i]);
    EXPECT_EQ(r.vols[i], 0) << i;
    EXPECT_EQ(r.european[i], 0) << i;
  }
}

TEST(AmericanInverter, RefusesTwoBoundariesAndUnsoundTerms) {
  const std::vector<double> strikes{100, 100}, prices{5, 5};
  const std::vector<PutCall> sides{PutCall::put, PutCall::call};
  const auto between = inverted({100, -0.01, -0.05, 1}, strikes, sides, prices);
  EXPECT_EQ(between.statuses[0], AmericanVolStatus::two_boundaries);
  EXPECT_EQ(between.statuses[1], AmericanVolStatus::ok);  // r > q <= 0: the call is European
  for (const AmericanColumnTerms& bad :
       {AmericanColumnTerms{kNaN, 0.05, 0, 1}, AmericanColumnTerms{100, kNaN, 0, 1},
        AmericanColumnTerms{100, 0.05, kInfinity, 1}, AmericanColumnTerms{100, 0.05, 0, 0}})
    for (const auto status : inverted(bad, strikes, sides, prices).statuses)
      EXPECT_EQ(status, AmericanVolStatus::not_finite);
}

// What is promised of the price at a vol found, at the spot of 100.
constexpr double kPromised = AmericanInverter::kPromise * 100;

TEST(AmericanInverter, PricesJustAboveIntrinsicFindTheCriticalVolatility) {
  const AmericanColumnTerms terms{100, 0.05, 0.01, 1};
  for (const double over : {1e-1, 1e-3, 1e-5}) {
    const auto r = inverted(terms, {130}, {PutCall::put}, {30 + over});
    ASSERT_EQ(r.statuses[0], AmericanVolStatus::ok) << over;
    const auto again = kEngine.price({PutCall::put, 100, 130, 0.05, 0.01, 1}, r.vols[0]);
    EXPECT_NEAR(again.price, 30 + over, kPromised) << over;
  }
}

TEST(AmericanInverter, GreatAndTinyVolatilitiesFallBackOnTheReferenceEngine) {
  const AmericanColumnTerms terms{100, 0.05, 0.01, 1};
  for (const double vol : {2e-3, 0.02, 3.0, 8.0}) {
    const AmericanTerms t{PutCall::put, 100, 100, 0.05, 0.01, 1};
    const auto made = kEngine.price(t, vol);
    const auto r = inverted(terms, {100}, {PutCall::put}, {made.price});
    ASSERT_EQ(r.statuses[0], AmericanVolStatus::ok) << vol;
    EXPECT_NEAR(kEngine.price(t, r.vols[0]).price, made.price, kPromised) << vol;
  }
}

TEST(AmericanInverter, AQuoteHasTheSameVolAloneAndInAChain) {
  const Chain c = chain_of({100, 0.05, 0.02, 0.5});
  const auto r = inverted(c.terms, c.strikes, c.sides, c.prices);
  for (std::size_t i = 0; i < c.prices.size(); ++i) {
    const auto alone = inverted(c.terms, {c.strikes[i]}, {c.sides[i]}, {c.prices[i]});
    // Searches start apart, and end within the square of their last step, 1e-6 of the vol; a border
    // between tables may lie in between.
    EXPECT_NEAR(alone.vols[0], r.vols[i], 1e-5 * r.vols[i]) << c.strikes[i];
  }
}

TEST(AmericanInverter, TablesAreTheSameBitsOnEverySimdWidth) {
  const Chain c = chain_of({100, 0.05, 0.02, 0.5});
  use_batch_target("");
  const auto widest = inverted(c.terms, c.strikes, c.sides, c.prices);
  for (const auto& target : batch_targets()) {
    use_batch_target(target);
    const auto r = inverted(c.terms, c.strikes, c.sides, c.prices);
    for (std::size_t i = 0; i < c.prices.size(); ++i)
      EXPECT_EQ(r.vols[i], widest.vols[i]) << target << ' ' << i;
  }
  use_batch_target("");
}

TEST(PremiumPanels, AgreeWithTheReferenceEngine) {
  const PanelMaker maker;
  const double rates[][2] = {{0.03, 0.01}, {0.05, 0.05}, {0.05, 0.0}, {0.0, -0.03}, {0.04, 0.06}};
  for (const auto& [rate, yield] : rates) {
    const auto panel = maker.make(rate, yield, 0.15, 0.3);
    ASSERT_TRUE(panel.converged);
    for (const double s : {0.15, 0.19, 0.24, 0.3})
      for (const double log_spot : {-0.1, -0.05, 0.0, 0.1, 0.3}) {
        const auto p = kEngine.price({PutCall::put, std::exp(log_spot), 1, rate, yield, 1}, s);
        const auto at = premium_at(panel, log_spot, s);
        if (p.immediate || at.exercised) continue;
        // 1e-6 of the spot is promised where `error` is small; these rates are ordinary.
        EXPECT_NEAR(at.value, p.price - p.european, 1e-7) << rate << ' ' << s << ' ' << log_spot;
        constexpr double kStep = 1e-5;
        const double slope = (premium_at(panel, log_spot, s + kStep).value -
                              premium_at(panel, log_spot, s - kStep).value) /
                             (2 * kStep);
        EXPECT_NEAR(at.slope, slope, 1e-6) << rate << ' ' << s << ' ' << log_spot;
      }
  }
}

}  // namespace
}  // namespace duskgrid::pricing
