#include "pricing/selection.h"

#include <gtest/gtest.h>

#include <cmath>
#include <set>

#include "pricing/black.h"
#include "pricing/invert.h"

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;
using quotes::Quote;
using quotes::QuotedIn;
using quotes::Reason;

constexpr SliceMarket kMarket{.year_fraction = 0.25, .forward = 100, .discount_factor = 0.99};

// A slice of rows by strike, call before put, and the table that holds them.
struct Slice {
  quotes::QuoteTable table;
  quotes::ChainSlice rows{};

  Quote& add(PutCall side, double strike, double bid, double ask) {
    Quote q;
    q.put_call = side;
    q.strike = strike;
    q.bid = bid;
    q.ask = ask;
    rows.rows.push_back(static_cast<std::uint32_t>(table.quotes.size()));
    table.quotes.push_back(q);
    return table.quotes.back();
  }
  // Both sides priced at a vol with a half-spread of vol.
  void add_pair(double strike, double vol, double half_spread = 0.005) {
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      const auto price = [&](double v) {
        return black_price({side, kMarket.forward, strike, kMarket.discount_factor},
                           v * std::sqrt(kMarket.year_fraction));
      };
      add(side, strike, price(vol - half_spread), price(vol + half_spread));
    }
  }
  void select(const SelectionOptions& options = {}) {
    select_quotes(table, rows, kMarket, options);
  }
  const Quote& find(PutCall side, double strike) const {
    for (const Quote& q : table.quotes)
      if (q.put_call == side && q.strike == strike) return q;
    throw std::out_of_range("no such quote");
  }
  std::set<double> used() const {
    std::set<double> out;
    for (const Quote& q : table.quotes)
      if (q.reason == Reason::none) out.insert(q.strike);
    return out;
  }
};

Slice smile_slice() {
  Slice s;
  for (double strike = 70; strike <= 130; strike += 5) {
    const double k = std::log(strike / kMarket.forward);
    s.add_pair(strike, 0.2 - 0.2 * k + 0.5 * k * k);
  }
  return s;
}

TEST(SelectQuotes, EachStrikeKeepsItsOutOfTheMoneySide) {
  Slice s = smile_slice();
  s.select();
  for (const Quote& q : s.table.quotes) {
    const bool out = q.put_call == PutCall::call ? q.strike >= 100 : q.strike < 100;
    EXPECT_EQ(q.reason, out ? Reason::none : Reason::in_the_money) << q.strike;
  }
  EXPECT_EQ(s.used().size(), 13u);
}

TEST(SelectQuotes, VolsAreThoseOfThePrices) {
  Slice s = smile_slice();
  s.select();
  for (const Quote& q : s.table.quotes) {
    const double k = std::log(q.strike / kMarket.forward), vol = 0.2 - 0.2 * k + 0.5 * k * k;
    // In the money the time value is what is left of a price of up to 30: 1e-15 x 30 / vega(>=
    // 0.1).
    constexpr double kInverted = 1e-12;
    EXPECT_NEAR(q.vol_bid, vol - 0.005, kInverted);
    EXPECT_NEAR(q.vol_ask, vol + 0.005, kInverted);
    EXPECT_TRUE(q.vol_mid > q.vol_bid && q.vol_mid < q.vol_ask);
  }
}

TEST(SelectQuotes, UnsoundOutOfTheMoneySideIsReplacedByTheOther) {
  Slice s = smile_slice();
  for (Quote& q : s.table.quotes)
    if (q.strike == 110 && q.put_call == PutCall::call) q.reason = Reason::wide;
  s.select();
  EXPECT_EQ(s.find(PutCall::call, 110).reason, Reason::wide);
  EXPECT_EQ(s.find(PutCall::put, 110).reason, Reason::none);
}

TEST(SelectQuotes, ReplacementNeedsABidAboveIntrinsic) {
  Slice s;
  s.add_pair(100, 0.2);
  s.add(PutCall::put, 120, 0.99 * 20 - 0.1, 0.99 * 20 + 0.5);
  s.select();
  EXPECT_EQ(s.find(PutCall::put, 120).reason, Reason::in_the_money);
  EXPECT_EQ(s.find(PutCall::put, 120).vol_bid, 0);  // at or below intrinsic
  EXPECT_GT(s.find(PutCall::put, 120).vol_ask, 0);
}

TEST(SelectQuotes, AskAtOrBelowIntrinsicIsDroppedByName) {
  Slice s;
  s.add(PutCall::put, 120, 19.0, 0.99 * 20);
  s.select();
  EXPECT_EQ(s.table.quotes[0].reason, Reason::below_intrinsic);
}

TEST(SelectQuotes, BidAtOrAboveTheBoundIsDroppedByName) {
  Slice s;
  s.add(PutCall::call, 110, 99.0, 120.0);
  s.select();
  EXPECT_EQ(s.table.quotes[0].reason, Reason::above_bound);
}

// The ask has no volatility, so the quote cannot be fitted; it is not an in-the-money quote either.
TEST(SelectQuotes, OutOfTheMoneyAskAboveTheBoundIsNotCalledInTheMoney) {
  Slice s;
  s.add(PutCall::call, 110, 60.0, 99.5);
  s.select();
  EXPECT_EQ(s.table.quotes[0].reason, Reason::above_bound);
  EXPECT_TRUE(std::isfinite(s.table.quotes[0].vol_bid));
}

TEST(SelectQuotes, EarlierReasonIsKeptAndItsFirmSideStillHasAVol) {
  Slice s;
  s.add(PutCall::call, 110, 0.0, 1.0).reason = Reason::no_bid;
  s.select();
  EXPECT_EQ(s.table.quotes[0].reason, Reason::no_bid);
  EXPECT_EQ(s.table.quotes[0].vol_bid, 0);  // a written bid of nothing
  EXPECT_TRUE(std::isnan(s.table.quotes[0].vol_mid));
  EXPECT_GT(s.table.quotes[0].vol_ask, 0);
}

TEST(SelectQuotes, QuoteInVolatilityIsUsedAsQuoted) {
  Slice s;
  s.add(PutCall::call, 110, 0.21, 0.23).quoted_in = QuotedIn::vol;
  s.select();
  const Quote& q = s.table.quotes[0];
  EXPECT_EQ(q.reason, Reason::none);
  EXPECT_EQ(q.vol_bid, 0.21);
  EXPECT_EQ(q.vol_ask, 0.23);
  EXPECT_DOUBLE_EQ(q.vol_mid, 0.22);
}

TEST(SelectQuotes, StrikesPastTheFarWingAreSpare) {
  Slice s = smile_slice();
  // The deviation is 0.2 x 0.5: two of them reach k = 0.2, strikes 81.9 to 122.1.
  s.select({.far_deviations = 2});
  EXPECT_EQ(s.used(), (std::set<double>{85, 90, 95, 100, 105, 110, 115, 120}));
  EXPECT_EQ(s.find(PutCall::put, 80).reason, Reason::far_wing);
  EXPECT_EQ(s.find(PutCall::call, 125).reason, Reason::far_wing);
}

TEST(SelectQuotes, PlantedOutlierIsTheOnlyOneFound) {
  for (const double strike : {85.0, 95.0, 110.0, 120.0}) {
    Slice s = smile_slice();
    const double k = std::log(strike / kMarket.forward), vol = 0.2 - 0.2 * k + 0.5 * k * k + 0.12;
    const auto price = [&](PutCall side, double v) {
      return black_price({side, 100, strike, 0.99}, v * 0.5);
    };
    for (Quote& q : s.table.quotes)
      if (q.strike == strike) {
        q.bid = price(q.put_call, vol - 0.005);
        q.ask = price(q.put_call, vol + 0.005);
      }
    s.select();
    for (const Quote& q : s.table.quotes)
      EXPECT_EQ(q.reason == Reason::outlier,
                q.strike == strike && (q.put_call == PutCall::call) == (strike >= 100))
          << strike << ' ' << q.strike;
  }
}

TEST(SelectQuotes, OutlierLimitOfZeroKeepsEveryQuote) {
  Slice s = smile_slice();
  for (Quote& q : s.table.quotes)
    if (q.strike == 110) q.bid = 8 + q.bid, q.ask = 8 + q.ask;
  Slice judged = s;
  judged.select();
  EXPECT_EQ(judged.find(PutCall::call, 110).reason, Reason::outlier);
  s.select({.outlier_half_spreads = 0});
  EXPECT_EQ(s.find(PutCall::call, 110).reason, Reason::none);
}

TEST(SelectQuotes, ThinningKeepsTheEndsAndTheStatedCount) {
  Slice s = smile_slice();
  s.select({.most_quotes = 5});
  EXPECT_EQ(s.used(), (std::set<double>{70, 85, 100, 115, 130}));
  EXPECT_EQ(s.find(PutCall::put, 75).reason, Reason::thinned);
  for (const int most : {1, 2, 12, 13, 14}) {
    Slice again = smile_slice();
    again.select({.most_quotes = most});
    EXPECT_EQ(again.used().size(), static_cast<std::size_t>(std::min(most, 13))) << most;
  }
}

TEST(SelectQuotes, EmptySliceIsLeftAlone) {
  Slice s;
  s.select();
  EXPECT_TRUE(s.table.quotes.empty());
}

TEST(SelectionOptions, FirstBrokenRuleIsNamedWithItsValue) {
  EXPECT_FALSE(SelectionOptions{}.problem());
  EXPECT_NE(SelectionOptions{.far_deviations = 0}.problem()->find("far_deviations = 0"),
            std::string::npos);
  EXPECT_TRUE(SelectionOptions{.most_quotes = -1}.problem());
  EXPECT_TRUE(SelectionOptions{.outlier_half_spreads = std::nan("")}.problem());
}

}  // namespace
}  // namespace duskgrid::pricing
