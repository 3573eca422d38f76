#include "arbitrage/quote_checks.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <limits>

#include "pricing/black.h"
#include "trade_payoffs.h"

namespace duskgrid::arbitrage {
namespace {

using quotes::PutCall;

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// Sums of a few prices of about 100, in quote currency.
constexpr double kRounding = 1e-11;

quotes::Instant expiry_at(double t) {
  return quotes::Instant{} + std::chrono::seconds{static_cast<std::int64_t>(t * 31536000)};
}

struct Made {
  double t = 0.5, forward = 100, discount = 0.98, vol = 0.25, half_spread = 0.05;
  double first = 70, gap = 5;
  int count = 13;
};

// Black-priced quotes with a spread around each.
QuotedSlice made_slice(const Made& m = {}) {
  QuotedSlice out{expiry_at(m.t), m.t, m.forward, m.discount, false, {}};
  for (int i = 0; i < m.count; ++i) {
    const double strike = m.first + m.gap * i;
    const auto price = [&](PutCall side) {
      return pricing::black_price({side, m.forward, strike, m.discount}, m.vol * std::sqrt(m.t));
    };
    const double call = price(PutCall::call), put = price(PutCall::put), h = m.half_spread;
    out.strikes.push_back({strike, call - h, call + h, put - h, put + h});
  }
  return out;
}

QuotedStrike& at(QuotedSlice& slice, double strike) {
  return *std::find_if(slice.strikes.begin(), slice.strikes.end(),
                       [&](const QuotedStrike& s) { return s.strike == strike; });
}

std::vector<Violation> check(const QuotedSlice& slice) {
  return check_quotes(std::span(&slice, 1));
}

std::vector<Violation> of_kind(const std::vector<Violation>& all, Kind kind) {
  std::vector<Violation> out;
  std::copy_if(all.begin(), all.end(), std::back_inserter(out),
               [&](const Violation& v) { return v.kind == kind; });
  return out;
}

TEST(CheckQuotes, CleanChainsHaveNone) {
  std::vector<QuotedSlice> chain;
  for (const double t : {0.05, 0.25, 0.5, 1.0, 2.0})
    chain.push_back(made_slice({.t = t,
                                .forward = 100 * std::exp(0.02 * t),
                                .discount = std::exp(-0.03 * t),
                                .half_spread = 0.02}));
  EXPECT_TRUE(check_quotes(chain).empty());
}

TEST(CheckQuotes, CleanAmericanChainsHaveNone) {
  std::vector<QuotedSlice> chain;  // without rates and carry, where early exercise is worth nothing
  for (const double t : {0.05, 0.25, 0.5, 1.0, 2.0}) {
    chain.push_back(made_slice({.t = t, .discount = 1, .half_spread = 0.02}));
    chain.back().american = true;
  }
  EXPECT_TRUE(check_quotes(chain).empty());
}

TEST(CheckQuotes, QuotesWithoutASpreadAreCleanToRounding) {
  const auto found = check(made_slice({.half_spread = 0}));
  EXPECT_TRUE(found.empty()) << word(found[0].kind) << ' ' << found[0].amount;
}

TEST(CheckQuotes, CallBelowItsLowerBoundIsBought) {
  QuotedSlice s = made_slice();
  at(s, 70).call_ask = 0.98 * 30 - 0.25;
  at(s, 70).call_bid = kNaN;
  const auto found = of_kind(check(s), Kind::bounds);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.25, kRounding);
  EXPECT_EQ(found[0].strikes, std::vector<double>{70});
  ASSERT_EQ(found[0].legs.size(), 2u);
  EXPECT_EQ(found[0].legs[0].quantity, 1);
  EXPECT_EQ(found[0].legs[0].type, LegType::call);
  EXPECT_EQ(found[0].legs[1].quantity, -1);
  EXPECT_EQ(found[0].legs[1].type, LegType::forward);
  EXPECT_NEAR(locked_in(found[0], s), 0.25, kRounding);
  EXPECT_TRUE(std::isnan(found[0].half_spreads));  // one-sided
}

TEST(CheckQuotes, EveryBoundHasItsTrade) {
  const auto planted = [](double QuotedStrike::*side, double strike, double price) {
    QuotedSlice s = made_slice({.count = 1});
    s.strikes[0] = {strike, kNaN, kNaN, kNaN, kNaN};
    s.strikes[0].*side = price;
    return s;
  };
  const QuotedSlice cases[] = {
      planted(&QuotedStrike::call_ask, 70, 29.0), planted(&QuotedStrike::put_ask, 130, 29.0),
      planted(&QuotedStrike::call_bid, 110, 98.4), planted(&QuotedStrike::put_bid, 70, 69.0)};
  for (const QuotedSlice& s : cases) {
    const auto found = check(s);
    ASSERT_EQ(found.size(), 1u);
    EXPECT_EQ(found[0].kind, Kind::bounds);
    EXPECT_NEAR(found[0].amount, 0.4, kRounding);
    EXPECT_NEAR(locked_in(found[0], s), 0.4, kRounding);
  }
}

TEST(CheckQuotes, CallThatRisesWithStrikeIsAVertical) {
  QuotedSlice s = made_slice();
  at(s, 105).call_bid = at(s, 100).call_ask + 0.3;
  at(s, 105).call_ask = at(s, 105).call_bid + 0.1;
  const auto found = of_kind(check(s), Kind::vertical);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.3, kRounding);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{100, 105}));
  EXPECT_EQ(found[0].legs[0].strike, 100);
  EXPECT_EQ(found[0].legs[0].quantity, 1);
  EXPECT_EQ(found[0].legs[0].price, at(s, 100).call_ask);
  EXPECT_EQ(found[0].legs[1].strike, 105);
  EXPECT_EQ(found[0].legs[1].quantity, -1);
  EXPECT_EQ(found[0].legs[1].price, at(s, 105).call_bid);
  EXPECT_NEAR(found[0].half_spreads, 0.3 / (0.05 + 0.05), 1e-9);
  EXPECT_GT(found[0].vol_points, 0);
  EXPECT_NEAR(locked_in(found[0], s), 0.3, kRounding);
}

TEST(CheckQuotes, PutSpreadDearerThanItsWidthIsAVertical) {
  QuotedSlice s = made_slice();
  at(s, 110).put_bid = at(s, 105).put_ask + 0.98 * 5 + 0.2;
  at(s, 110).put_ask = at(s, 110).put_bid + 0.1;
  const auto found = of_kind(check(s), Kind::vertical);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.2, kRounding);
  EXPECT_NEAR(locked_in(found[0], s), 0.2, kRounding);
}

TEST(CheckQuotes, WiderVerticalIsReportedOnlyWhereNoAdjacentOneExplainsIt) {
  QuotedSlice s = made_slice({.half_spread = 0.02});
  for (auto& q : s.strikes) q.put_bid = q.put_ask = kNaN;
  // 110 is bid above the ask of 100, and 105 between them has no ask: only the wide pair can show
  // it.
  at(s, 105).call_ask = kNaN;
  at(s, 110).call_bid = at(s, 100).call_ask + 0.05;
  at(s, 110).call_ask = at(s, 110).call_bid + 0.04;
  const auto found = of_kind(check(s), Kind::vertical);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{100, 110}));
  EXPECT_NEAR(found[0].amount, 0.05, kRounding);
  EXPECT_NEAR(locked_in(found[0], s), 0.05, kRounding);
}

TEST(CheckQuotes, MiddleStrikeAboveTheLineIsAButterfly) {
  QuotedSlice s = made_slice();
  // Uneven neighbours: 95 and 110 about 100.
  s.strikes.erase(
      std::find_if(s.strikes.begin(), s.strikes.end(), [](auto& q) { return q.strike == 105; }));
  const double line = at(s, 95).call_ask * 2 / 3 + at(s, 110).call_ask / 3;
  at(s, 100).call_bid = line + 0.15;
  at(s, 100).call_ask = line + 0.25;
  const auto found = of_kind(check(s), Kind::butterfly);
  ASSERT_EQ(found.size(), 1u);
  const Violation& v = found[0];
  EXPECT_NEAR(v.amount, 0.15, kRounding);
  EXPECT_EQ(v.strikes, (std::vector<double>{95, 100, 110}));
  ASSERT_EQ(v.legs.size(), 3u);
  EXPECT_NEAR(v.legs[0].quantity, 2.0 / 3, kRounding);
  EXPECT_EQ(v.legs[1].quantity, -1);
  EXPECT_NEAR(v.legs[2].quantity, 1.0 / 3, kRounding);
  EXPECT_NEAR(locked_in(v, s), 0.15, kRounding);
}

TEST(CheckQuotes, WiderButterflyIsFoundWhereNeighboursHaveNoAsk) {
  QuotedSlice s = made_slice();
  at(s, 95).call_ask = at(s, 105).call_ask = kNaN;
  const double line = 0.5 * (at(s, 90).call_ask + at(s, 110).call_ask);
  at(s, 100).call_bid = line + 0.15;
  at(s, 100).call_ask = line + 0.25;
  const auto found = of_kind(check(s), Kind::butterfly);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{90, 100, 110}));
  EXPECT_NEAR(found[0].amount, 0.15, kRounding);
}

TEST(CheckQuotes, ParityBreakIsTradedAgainstTheForward) {
  QuotedSlice s = made_slice();
  at(s, 100).call_bid += 0.5;
  at(s, 100).call_ask += 0.5;
  const auto found = of_kind(check(s), Kind::parity);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.5 - 2 * 0.05, kRounding);  // less both half-spreads
  EXPECT_EQ(found[0].legs.size(), 3u);
  EXPECT_NEAR(locked_in(found[0], s), 0.4, kRounding);
}

TEST(CheckQuotes, BoxThatCostsLessThanItsValueIsBought) {
  QuotedSlice s = made_slice({.first = 98, .gap = 4, .count = 2});
  for (double QuotedStrike::*side : {&QuotedStrike::put_bid, &QuotedStrike::put_ask})
    at(s, 98).*side += 0.6;
  const auto found = of_kind(check(s), Kind::box);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.6 - 4 * 0.05, kRounding);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{98, 102}));
  EXPECT_EQ(found[0].legs.size(), 4u);
  EXPECT_NEAR(locked_in(found[0], s), 0.4, kRounding);
}

struct CalendarPair {
  QuotedSlice early, late;
  std::vector<Violation> check() const {
    const QuotedSlice both[] = {early, late};
    return of_kind(check_quotes(both), Kind::calendar);
  }
};

CalendarPair calendar_pair(double late_forward) {
  return {made_slice({.t = 0.25, .discount = 0.99, .half_spread = 0.02}),
          made_slice({.t = 1, .forward = late_forward, .discount = 0.95, .half_spread = 0.02})};
}

TEST(CheckQuotes, EarlyCallDearerThanALateOneAtTheSameMoneynessIsACalendar) {
  CalendarPair pair = calendar_pair(100);
  QuotedStrike& early = at(pair.early, 100);
  const double quantity = 0.99 / 0.95;
  early.call_bid = quantity * at(pair.late, 100).call_ask + 0.3;
  early.call_ask = early.call_bid + 0.1;
  const auto found = pair.check();
  ASSERT_EQ(found.size(), 1u);
  const Violation& v = found[0];
  EXPECT_NEAR(v.amount, 0.3, kRounding);
  EXPECT_EQ(v.expiry, pair.early.expiry);
  EXPECT_EQ(v.expiry_2, pair.late.expiry);
  EXPECT_EQ(v.strikes, (std::vector<double>{100, 100}));
  EXPECT_EQ(v.legs[0].quantity, -1);
  EXPECT_NEAR(v.legs[1].quantity, quantity, kRounding);
  EXPECT_NEAR(locked_in_calendar(v, pair.early, pair.late), 0.3, 1e-9);
}

TEST(CheckQuotes, CalendarBetweenLateStrikesIsBoughtOnTheLine) {
  CalendarPair pair = calendar_pair(102);  // equal moneyness of 100 is 102, between 100 and 105
  QuotedStrike& early = at(pair.early, 100);
  const double line = 0.6 * at(pair.late, 100).call_ask + 0.4 * at(pair.late, 105).call_ask;
  early.call_bid = 0.99 * 100 / (0.95 * 102) * line + 0.3;
  early.call_ask = early.call_bid + 0.1;
  const auto found = pair.check();
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.3, kRounding);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{100, 100, 105}));
  EXPECT_NEAR(locked_in_calendar(found[0], pair.early, pair.late), 0.3, 1e-9);
}

TEST(CheckQuotes, CheapLateQuoteIsExplainedByItsNearestEarlierExpiry) {
  std::vector<QuotedSlice> chain;
  for (const double t : {0.25, 0.5, 1.0})
    chain.push_back(made_slice({.t = t, .discount = 1, .half_spread = 0.02}));
  // Below both earlier calls at 100: the adjacent pair of expiries tells it all.
  at(chain[2], 100).call_ask = at(chain[0], 100).call_bid - 0.2;
  at(chain[2], 100).call_bid = at(chain[2], 100).call_ask - 0.04;
  const auto found = of_kind(check_quotes(chain), Kind::calendar);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_EQ(found[0].expiry, chain[1].expiry);
  EXPECT_EQ(found[0].expiry_2, chain[2].expiry);
}

TEST(CheckQuotes, CalendarSkipsAnExpiryThatLacksTheStrike) {
  std::vector<QuotedSlice> chain;
  for (const double t : {0.25, 0.5, 1.0})
    chain.push_back(made_slice({.t = t, .discount = 1, .half_spread = 0.02}));
  chain[1].strikes.resize(2);  // 70 and 75 only
  at(chain[2], 100).call_ask = at(chain[0], 100).call_bid - 0.2;
  const auto found = of_kind(check_quotes(chain), Kind::calendar);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_EQ(found[0].expiry, chain[0].expiry);
  EXPECT_NEAR(found[0].amount, 0.2, kRounding);
}

TEST(CheckQuotes, AmericanCalendarComparesEqualStrikesUndiscounted) {
  CalendarPair pair{made_slice({.t = 0.25, .discount = 1, .half_spread = 0.02}),
                    made_slice({.t = 1, .discount = 1, .half_spread = 0.02})};
  pair.early.american = pair.late.american = true;
  pair.late.forward = 102;  // plays no part
  QuotedStrike& early = at(pair.early, 100);
  early.put_bid = at(pair.late, 100).put_ask + 0.25;
  early.put_ask = early.put_bid + 0.1;
  const auto found = pair.check();
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.25, kRounding);
  EXPECT_EQ(found[0].strikes, (std::vector<double>{100, 100}));
  EXPECT_EQ(found[0].legs[1].quantity, 1);
}

TEST(CheckQuotes, AmericanSpreadMayCostUpToItsWidth) {
  QuotedSlice s = made_slice();
  s.american = true;
  for (auto& q : s.strikes) q.call_bid = q.call_ask = kNaN;
  // Dearer than D dK but not than dK: early exercise can make it so.
  at(s, 110).put_bid = at(s, 105).put_ask + 4.95;
  at(s, 110).put_ask = at(s, 110).put_bid + 0.1;
  EXPECT_TRUE(of_kind(check(s), Kind::vertical).empty());
  at(s, 110).put_bid = at(s, 105).put_ask + 5.2;
  const auto found = of_kind(check(s), Kind::vertical);
  ASSERT_EQ(found.size(), 1u);
  EXPECT_NEAR(found[0].amount, 0.2, kRounding);
}

TEST(CheckQuotes, AmericanQuotesAreNotHeldToEuropeanParity) {
  QuotedSlice s = made_slice();
  s.american = true;
  at(s, 130).put_bid = 30.2;  // exercised at once it pays 30; parity with D says 29.4 + call
  at(s, 130).put_ask = 30.5;
  for (const Violation& v : check(s))
    EXPECT_TRUE(v.kind != Kind::parity && v.kind != Kind::box && v.kind != Kind::bounds);
}

TEST(CheckQuotes, BreaksWithinTheToleranceAreNotReported) {
  QuotedSlice s = made_slice();
  at(s, 105).call_bid = at(s, 100).call_ask + 0.3;
  EXPECT_FALSE(check(s).empty());
  EXPECT_TRUE(check_quotes(std::span(&s, 1), 0.05).empty());  // 5 of currency
}

TEST(CheckQuotes, EmptyAndOneSidedSlicesAreQuiet) {
  EXPECT_TRUE(check_quotes({}).empty());
  QuotedSlice s = made_slice({.count = 0});
  EXPECT_TRUE(check(s).empty());
  s = made_slice();
  for (auto& q : s.strikes) q.call_bid = q.call_ask = q.put_bid = kNaN;
  EXPECT_TRUE(check(s).empty());
}

}  // namespace
}  // namespace duskgrid::arbitrage
