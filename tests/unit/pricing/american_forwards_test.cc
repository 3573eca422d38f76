#include "pricing/american_forwards.h"

#include <gtest/gtest.h>

#include <cmath>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

const DividendInverter& inverter() {
  static const DividendInverter kInverter;
  return kInverter;
}

struct Made {
  double spot, rate, borrow, t, vol, half_spread;
};

// Pairs of nine strikes around the money, each price by the reference engine.
std::vector<ExercisePair> pairs_of(const Made& m) {
  const AmericanEngine engine;
  std::vector<ExercisePair> pairs;
  for (int i = -4; i <= 4; ++i) {
    const double strike = m.spot * (1 + 0.025 * i);
    const auto price = [&](PutCall side) {
      return engine.price({side, m.spot, strike, m.rate, m.borrow, m.t}, m.vol).price;
    };
    const double call = price(PutCall::call), put = price(PutCall::put);
    const double width = 2 * m.half_spread;
    pairs.push_back(
        {{strike, call - put - width, call - put + width, call + put}, call, put, true, true});
  }
  return pairs;
}

market::ForwardEstimate start_of(const Made& m, const std::vector<ExercisePair>& pairs) {
  market::ForwardEstimate estimate{.forward = 0,
                                   .discount_factor = std::exp(-m.rate * m.t),
                                   .zero_rate = m.rate,
                                   .carry = {},
                                   .lowest_forward = 0,
                                   .highest_forward = 0};
  std::vector<market::ParityPair> quoted;
  for (const auto& p : pairs) quoted.push_back(p.quoted);
  market::place_forward(quoted, estimate);
  return estimate;
}

const std::vector<Made>& cases() {
  static const std::vector<Made> kCases{
      {100, 0.05, 0, 1, 0.2, 0.05},     {100, 0.05, 0, 0.1, 0.3, 0.02},
      {100, 0.03, 0.25, 0.5, 0.6, 0.1}, {100, 0.0, 0.05, 0.64, 0.6, 0.05},
      {100, 0.08, 0.02, 2, 0.15, 0.05}, {100, -0.005, 0.0, 1, 0.2, 0.05},
      {12, 0.05, 0.4, 1.5, 0.9, 0.05},
  };
  return kCases;
}

TEST(SettleForward, AgreesWithTheForwardThatMadeTheQuotes) {
  for (const Made& m : cases()) {
    const auto pairs = pairs_of(m);
    auto estimate = start_of(m, pairs);
    const auto settled =
        settle_forward(inverter(), {{m.spot, m.rate, 0, m.t}, {}}, pairs, estimate);
    EXPECT_TRUE(settled.settled);
    const double forward = m.spot * std::exp((m.rate - m.borrow) * m.t);
    // A tenth of the half-spread of a pair is asked; mids being exact there is only the promise of
    // the inversion, 1e-6 of the spot a premium, and the tolerance of the iteration.
    EXPECT_NEAR(estimate.forward, forward, 5e-6 * m.spot) << m.rate << " " << m.borrow;
    EXPECT_LT(std::abs(estimate.forward - forward), 0.1 * m.half_spread);
    EXPECT_NEAR(settled.borrow, m.borrow, 5e-6 / m.t);
    EXPECT_LE(settled.rounds, 8);
    EXPECT_EQ(estimate.pairs, 9);
    EXPECT_EQ(estimate.breaks, 0);
  }
}

// Otherwise the test above would show nothing.
TEST(SettleForward, ParityOfTheQuotedPricesAloneIsFurtherOff) {
  for (const Made& m : cases()) {
    if (m.rate < 0) continue;  // early exercise is worth nothing
    const double forward = m.spot * std::exp((m.rate - m.borrow) * m.t);
    EXPECT_GT(std::abs(start_of(m, pairs_of(m)).forward - forward), 0.1 * m.half_spread) << m.rate;
  }
}

TEST(SettleForward, EuropeanSidesKeepTheirPrices) {
  const Made m = cases()[0];
  auto pairs = pairs_of(m);
  for (auto& p : pairs) p.call_american = p.put_american = false;
  auto estimate = start_of(m, pairs);
  const double before = estimate.forward;
  EXPECT_TRUE(settle_forward(inverter(), {{m.spot, m.rate, 0, m.t}, {}}, pairs, estimate).settled);
  EXPECT_EQ(estimate.forward, before);
}

TEST(SettleForward, PairsWithoutVolatilityDropOutAndNoneLeftIsUnsettled) {
  const Made m = cases()[0];
  auto pairs = pairs_of(m);
  pairs[8].put_mid = pairs[8].quoted.strike - m.spot;  // no more than exercise pays
  auto estimate = start_of(m, pairs);
  const ExerciseTerms terms{{m.spot, m.rate, 0, m.t}, {}};
  EXPECT_TRUE(settle_forward(inverter(), terms, pairs, estimate).settled);
  EXPECT_EQ(estimate.pairs, 8);
  for (auto& p : pairs) p.put_mid = 0.5 * (p.quoted.strike - m.spot);
  auto untouched = start_of(m, pairs);
  const double before = untouched.forward;
  EXPECT_FALSE(settle_forward(inverter(), terms, pairs, untouched).settled);
  EXPECT_EQ(untouched.forward, before);
}

}  // namespace
}  // namespace duskgrid::pricing
