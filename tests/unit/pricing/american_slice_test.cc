#include "pricing/american_slice.h"

#include <gtest/gtest.h>

#include <cmath>

#include "pricing/selection.h"

namespace duskgrid::pricing {
namespace {

using quotes::Exercise;
using quotes::PutCall;
using quotes::Quote;
using quotes::Reason;

constexpr double kSpot = 100, kRate = 0.04, kBorrow = 0.01, kTime = 0.75, kVol = 0.3;

class Equivalents : public testing::Test {
 protected:
  Quote& add(PutCall side, double strike, double half_spread, Exercise exercise) {
    const double price = engine_.price({side, kSpot, strike, kRate, kBorrow, kTime}, kVol).price;
    Quote q;
    q.put_call = side;
    q.strike = strike;
    q.exercise = exercise;
    q.bid = price - half_spread;
    q.ask = price + half_spread;
    slice_.rows.push_back(static_cast<std::uint32_t>(table_.quotes.size()));
    return table_.quotes.emplace_back(q);
  }
  std::vector<EquivalentQuote> equivalents() const {
    return european_equivalents(inverter_, terms_, table_, slice_);
  }
  void select() {
    const double forward = kSpot * std::exp((kRate - kBorrow) * kTime);
    select_quotes(table_, slice_, {kTime, forward, std::exp(-kRate * kTime)}, {}, equivalents());
  }

  AmericanEngine engine_;
  DividendInverter inverter_;
  ExerciseTerms terms_{{kSpot, kRate, kBorrow, kTime}, {}};
  quotes::QuoteTable table_;
  quotes::ChainSlice slice_{};
};

TEST_F(Equivalents, AmericanSidesGetTheEuropeanPriceOfTheirVolatility) {
  for (const double strike : {80.0, 100.0, 115.0})
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      const Quote& q = add(side, strike, 0.02, Exercise::american);
      const auto e = equivalents().back();
      ASSERT_EQ(e.mid.status, AmericanVolStatus::ok);
      const auto p = engine_.price({side, kSpot, strike, kRate, kBorrow, kTime}, kVol);
      // The promise of the inversion, 1e-6 of the spot, and over a vega of 10 or more.
      EXPECT_NEAR(e.mid.price, p.european, 1e-6 * kSpot);
      EXPECT_NEAR(e.mid.vol, kVol, 1e-5);
      EXPECT_LT(e.bid.vol, e.mid.vol);
      EXPECT_LT(e.mid.vol, e.ask.vol);
      EXPECT_LT(e.bid.price, q.bid + 1e-6 * kSpot);
    }
}

TEST_F(Equivalents, EuropeanRowsAndThoseInVolatilityKeepTheirDefaults) {
  add(PutCall::put, 100, 0.02, Exercise::european);
  add(PutCall::put, 100, 0.02, Exercise::american).quoted_in = quotes::QuotedIn::vol;
  for (const auto& e : equivalents()) {
    EXPECT_EQ(e.ask.status, AmericanVolStatus::not_finite);
    EXPECT_TRUE(std::isnan(e.ask.price));
  }
}

TEST_F(Equivalents, OneSidedQuoteHasItsFirmSideOnly) {
  add(PutCall::put, 100, 0.02, Exercise::american).bid = 0;
  const auto e = equivalents()[0];
  EXPECT_EQ(e.ask.status, AmericanVolStatus::ok);
  EXPECT_EQ(e.bid.status, AmericanVolStatus::not_finite);
  EXPECT_EQ(e.mid.status, AmericanVolStatus::not_finite);
}

// The premium of one dividend is not known to the volatility of Black's formula.
TEST_F(Equivalents, BehindCashDividendsTheVolatilityIsLeftToBlacksFormula) {
  terms_.dividends = {{0.3, market::DividendKind::cash, 1.0}};
  add(PutCall::put, 100, 0.02, Exercise::american);
  const auto e = equivalents()[0];
  EXPECT_EQ(e.mid.status, AmericanVolStatus::ok);
  EXPECT_TRUE(std::isnan(e.mid.vol));
  EXPECT_GT(e.mid.price, 0);
}

TEST_F(Equivalents, SelectionTakesVolatilitiesWithEarlyExerciseAndReasons) {
  add(PutCall::call, 90, 0.02, Exercise::american);
  add(PutCall::put, 90, 0.02, Exercise::american);
  add(PutCall::put, 110, 0.02, Exercise::american);
  Quote& worth_exercise = add(PutCall::put, 190, 0, Exercise::american);
  worth_exercise.bid = 89.9, worth_exercise.ask = 90.1;
  Quote& too_low = add(PutCall::put, 195, 0, Exercise::american);
  too_low.bid = 93, too_low.ask = 94;
  Quote& too_high = add(PutCall::put, 200, 0, Exercise::american);
  too_high.bid = 199, too_high.ask = 201;
  select();
  const auto& q = table_.quotes;
  EXPECT_EQ(q[0].reason, Reason::in_the_money);
  EXPECT_EQ(q[1].reason, Reason::none);
  EXPECT_EQ(q[2].reason, Reason::none);  // carries its strike: its bid has time value
  EXPECT_NEAR(q[2].vol_mid, kVol, 1e-5);
  EXPECT_EQ(q[3].reason, Reason::immediate_exercise);
  EXPECT_EQ(q[3].vol_bid, 0);
  EXPECT_TRUE(std::isnan(q[3].vol_mid));
  EXPECT_GT(q[3].vol_ask, 0);
  EXPECT_EQ(q[4].reason, Reason::below_intrinsic);
  EXPECT_EQ(q[5].reason, Reason::above_bound);
}

}  // namespace
}  // namespace duskgrid::pricing
