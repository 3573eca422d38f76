#include "night/mark.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <map>

#include "arbitrage/certificate.h"
#include "market/day_count.h"
#include "pricing/american.h"
#include "pricing/black.h"

namespace duskgrid::night {
namespace {

using quotes::PutCall;
using quotes::Quote;
using quotes::Reason;
using namespace std::chrono_literals;

const quotes::Instant kAsOf = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 16h;
constexpr double kSpot = 100, kRate = 0.03, kVol = 0.2;
// Half-spread of vol of every quote here, the least that the fit credits.
constexpr double kHalfSpread = 1e-4;
// The fit stops once a step would lower its cost, half the sum of squared misfits in half-spreads,
// by less than 1e-10: what is left is 1e-5 of a half-spread.
constexpr double kFlat = 1e-5 * kHalfSpread;
// Forwards of about 100 from sums of some prices of that size: absolute.
constexpr double kForwardRounding = 1e-10;

quotes::Instant in_days(int days) { return kAsOf + std::chrono::days{days}; }

double years(int days) { return market::year_fraction(kAsOf, in_days(days)); }

double forward_of(int days) { return kSpot * std::exp(kRate * years(days)); }

// With the curve given, parity has no rate of its own to guess.
constexpr const char* kRates = "rates = {1Y = 0.03}\n";

// A night of one underlying, Black-priced with a spread that leaves the mid exact.
struct Night {
  quotes::QuoteTable table;
  NightConfig config;

  explicit Night(const std::string& toml = "") {
    auto parsed = parse_config("as_of = '2031-03-14'\n" + toml, "night.toml", "");
    if (parsed)
      config = std::move(*parsed);
    else
      ADD_FAILURE() << parsed.failure().text();
    table.files = {"a.csv"};
    table.underlyings = {"HALYRD"};
  }

  Quote& add(quotes::Instant expiry, PutCall side, double strike, double bid, double ask) {
    Quote q;
    q.file = 0;
    q.line = static_cast<std::int64_t>(table.quotes.size()) + 2;
    q.underlying = 0;
    q.expiry = expiry;
    q.put_call = side;
    q.strike = strike;
    q.bid = bid;
    q.ask = ask;
    return table.quotes.emplace_back(q);
  }
  // Calls, puts or both over the strikes that have a price to speak of.
  void add_flat(int days, std::vector<PutCall> sides = {PutCall::call, PutCall::put},
                double vol = kVol) {
    const double t = years(days), discount = std::exp(-kRate * t);
    for (double strike = 75; strike <= 130; strike += 5)
      for (const PutCall side : sides) {
        const double price =
            pricing::black_price({side, forward_of(days), strike, discount}, vol * std::sqrt(t));
        const double half =
            kHalfSpread *
            pricing::black_greeks({side, forward_of(days), strike, discount}, vol, t).vega;
        add(in_days(days), side, strike, price - half, price + half);
      }
  }

  MarkedUnderlying mark() {
    const auto night = resolve(config);
    quotes::clean_quotes(table, night->as_of.instant, config.clean);
    const auto chains = quotes::group_chains(table);
    return mark_underlying(table, chains.at(0), config, *night);
  }
  std::int64_t count(Reason reason) const {
    return std::count_if(table.quotes.begin(), table.quotes.end(),
                         [&](const Quote& q) { return q.reason == reason; });
  }
};

bool holds(const std::string& text, const std::string& piece) {
  return text.find(piece) != std::string::npos;
}

TEST(MarkUnderlying, FlatChainIsPublishedFlatWithoutAMiss) {
  Night night(kRates);
  for (const int days : {60, 180, 400}) night.add_flat(days);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::published) << marked.record.message;
  EXPECT_EQ(marked.record.message, "");
  EXPECT_EQ(marked.record.name, "HALYRD");
  EXPECT_EQ(marked.record.slices, 3);
  EXPECT_GT(marked.record.used, 0);
  EXPECT_EQ(marked.record.inside, marked.record.used);
  EXPECT_EQ(marked.record.violations, 0);
  EXPECT_TRUE(marked.violations.empty());
  double worst = 0;
  for (const auto& node : marked.grid)
    if (node.support != publish::Support::extrapolated)
      worst = std::max(worst, std::abs(node.vol - kVol));
  EXPECT_LT(worst, kFlat);
  std::printf("worst distance from flat: %.2g\n", worst);
  for (const Quote& q : night.table.quotes) EXPECT_TRUE(q.reason != Reason::none || q.miss == 0);
}

TEST(MarkUnderlying, ForwardsOfAFlatChainAreFoundByParity) {
  Night night(kRates);
  night.add_flat(60);
  night.add_flat(400);
  const auto marked = night.mark();
  ASSERT_EQ(marked.forwards.size(), 2U);
  for (const auto& row : marked.forwards) {
    EXPECT_EQ(row.estimate.source, market::ForwardSource::parity);
    EXPECT_NEAR(row.estimate.forward, kSpot * std::exp(kRate * row.year_fraction),
                kForwardRounding);
    EXPECT_EQ(row.estimate.carry, std::nullopt);
  }
}

TEST(MarkUnderlying, CountsOfTheRecordAreThoseOfTheTable) {
  Night night(kRates);
  night.add_flat(60);
  night.add_flat(180);
  night.add(in_days(60), PutCall::call, 300, quotes::kAbsent, 0.01);
  night.add(in_days(-1), PutCall::call, 100, 1, 2);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.used, night.count(Reason::none));
  EXPECT_EQ(marked.record.inside,
            std::count_if(night.table.quotes.begin(), night.table.quotes.end(),
                          [](const Quote& q) { return q.reason == Reason::none && q.miss == 0; }));
  std::int64_t used = 0, inside = 0;
  for (const auto& q : marked.quality) {
    used += q.used;
    inside += q.inside;
    EXPECT_LT(q.rms_vol, kFlat);
  }
  EXPECT_EQ(used, marked.record.used);
  EXPECT_EQ(inside, marked.record.inside);
  EXPECT_EQ(marked.record.slices, static_cast<std::int64_t>(marked.quality.size()));
}

// Every second price up and the others down: butterflies that no surface meets.
void zigzag(quotes::QuoteTable& table) {
  for (Quote& q : table.quotes) {
    const double up = static_cast<int>(q.strike) % 10 == 0 ? 1.05 : 0.95;
    q.bid *= up;
    q.ask *= up;
  }
}

TEST(MarkUnderlying, MissIsTheDistanceOutsideTheSpreadInHalfSpreads) {
  Night night;
  night.add_flat(60);
  zigzag(night.table);
  night.mark();
  constexpr double kLeastHalfSpread = 1e-6;  // as promised in docs/formats.md
  int outside = 0;
  for (const Quote& q : night.table.quotes) {
    if (q.reason != Reason::none) {
      EXPECT_TRUE(std::isnan(q.miss));
      continue;
    }
    const double half = std::max(0.5 * (q.vol_ask - q.vol_bid), kLeastHalfSpread);
    const double expected = q.vol_fit > q.vol_ask   ? (q.vol_fit - q.vol_ask) / half
                            : q.vol_fit < q.vol_bid ? (q.vol_fit - q.vol_bid) / half
                                                    : 0;
    EXPECT_DOUBLE_EQ(q.miss, expected);
    outside += expected != 0 ? 1 : 0;
  }
  EXPECT_GT(outside, 0);
}

TEST(MarkUnderlying, SurfaceOfQuotesThatNoSurfaceMeetsIsProvedAllTheSame) {
  Night night;
  night.add_flat(60);
  zigzag(night.table);
  const auto marked = night.mark();
  EXPECT_TRUE(marked.record.certified);
  EXPECT_TRUE(arbitrage::certify(*marked.surface).certified);
}

TEST(MarkUnderlying, MoreMissesThanAllowedFlagTheUnderlying) {
  const auto message = [](const std::string& share) {
    Night night("[flags]\nmost_missed = " + share + "\n[selection]\noutlier_half_spreads = 0\n");
    night.add_flat(60);
    for (Quote& q : night.table.quotes)
      if (q.strike == 90) q.bid = (q.ask *= 1.5) - 0.001;
    return night.mark().record.message;
  };
  EXPECT_TRUE(holds(message("0"), "missed")) << message("0");
  EXPECT_FALSE(holds(message("1"), "missed")) << message("1");
}

TEST(MarkUnderlying, NoUsableQuoteIsRefusedWithTheCountOfEachReason) {
  Night night;
  for (const double strike : {90, 95, 100}) night.add(in_days(60), PutCall::call, strike, 0, 1);
  night.add(in_days(60), PutCall::put, 100, 2, 1);
  night.add(in_days(-1), PutCall::put, 100, 1, 2);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::refused);
  EXPECT_FALSE(marked.surface);
  EXPECT_TRUE(marked.grid.empty());
  EXPECT_EQ(marked.record.slices, 0);
  EXPECT_EQ(marked.record.used, 0);
  for (const char* part : {"no-bid 3", "crossed 1", "expired 1"})
    EXPECT_TRUE(holds(marked.record.message, part)) << marked.record.message;
}

TEST(MarkUnderlying, OnlyUnreadableRowsAreRefusedWithTheirCount) {
  Night night;
  for (int i = 0; i < 2; ++i)
    night.add(in_days(60), PutCall::call, 100, 1, 2).reason = Reason::unreadable;
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::refused);
  EXPECT_TRUE(holds(marked.record.message, "unreadable or duplicate 2")) << marked.record.message;
}

TEST(MarkUnderlying, WhollyExpiredChainIsRefused) {
  Night night;
  night.add(in_days(-1), PutCall::call, 100, 1, 2);
  night.add(in_days(0), PutCall::put, 100, 1, 2);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::refused);
  EXPECT_TRUE(holds(marked.record.message, "expired 2")) << marked.record.message;
  EXPECT_TRUE(marked.forwards.empty());
}

TEST(MarkUnderlying, ExpiryWithoutAForwardIsFlaggedAndItsQuotesLeftOut) {
  Night night;
  night.add_flat(60);
  night.add_flat(180, {PutCall::call});
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::flagged);
  EXPECT_TRUE(holds(marked.record.message, "no forward: 1 of 2")) << marked.record.message;
  EXPECT_EQ(marked.record.slices, 1);
  EXPECT_EQ(marked.forwards.size(), 1U);
  EXPECT_EQ(night.count(Reason::no_forward), 12);
  for (const Quote& q : night.table.quotes)
    EXPECT_EQ(q.reason == Reason::no_forward, q.expiry == in_days(180));
}

// An American chain of tonight by the reference engine, flat in volatility, half a cent to each
// side of a price: puts and calls from 75 to 130.
struct AmericanNight : Night {
  static constexpr double kBorrow = 0.045, kHalf = 0.005;
  explicit AmericanNight(const std::string& toml = "") : Night(toml) {}

  void add_american(int days, double borrow = kBorrow) {
    const pricing::AmericanEngine engine;
    for (double strike = 75; strike <= 130; strike += 5)
      for (const PutCall side : {PutCall::call, PutCall::put}) {
        const auto price =
            engine.price({side, kSpot, strike, kRate, borrow, years(days)}, kVol).price;
        Quote& q = add(in_days(days), side, strike, price - kHalf, price + kHalf);
        q.exercise = quotes::Exercise::american;
        q.underlying_price = kSpot;
      }
  }
};

TEST(MarkUnderlying, AmericanChainGivesItsVolatilityAndItsBorrow) {
  AmericanNight night(kRates);
  for (const int days : {60, 180, 400}) night.add_american(days);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::published) << marked.record.message;
  EXPECT_EQ(marked.record.message, "");
  ASSERT_EQ(marked.financing.size(), 3U);
  for (std::size_t i = 0; i < 3; ++i) {
    const auto& row = marked.financing[i];
    const double t = marked.forwards[i].year_fraction;
    EXPECT_EQ(row.exercise, publish::ExerciseTaken::american);
    EXPECT_EQ(row.spot_origin, publish::Origin::rows);
    EXPECT_EQ(row.rate_origin, publish::Origin::given);
    EXPECT_EQ(row.borrow_origin, publish::Origin::inferred);
    // The mids are exact: what is left is the 1e-6 of spot promised of an inversion.
    EXPECT_NEAR(marked.forwards[i].estimate.forward,
                kSpot * std::exp((kRate - AmericanNight::kBorrow) * t), 4e-6 * kSpot);
    EXPECT_NEAR(row.borrow, AmericanNight::kBorrow, 4e-6 / t);
    EXPECT_NEAR(row.borrow, *marked.forwards[i].estimate.carry, 1e-12);
  }
  // In the money a cent of spread is much in volatility: the fitted side is the other.
  for (const Quote& q : night.table.quotes) {
    if (q.reason != Reason::none) continue;
    EXPECT_LT(q.vol_bid, kVol);
    EXPECT_GT(q.vol_ask, kVol);
    EXPECT_EQ(q.miss, 0) << q.strike;
    // The mids being flat, the smoothest surface inside the spreads is flat to about the tightest
    // half-spread: half a cent over vegas of 16 to 40 at the money, 1e-4 to 3e-4.
    EXPECT_NEAR(q.vol_fit, kVol, 2e-4) << q.strike;
  }
}

TEST(MarkUnderlying, QuotedPricesOfAmericanChainsStayInTheLedger) {
  AmericanNight night(kRates);
  night.add_american(180);
  const auto before = night.table.quotes;
  night.mark();
  for (std::size_t i = 0; i < before.size(); ++i) {
    EXPECT_EQ(night.table.quotes[i].bid, before[i].bid);
    EXPECT_EQ(night.table.quotes[i].ask, before[i].ask);
  }
}

TEST(MarkUnderlying, AmericanChainWithoutASpotTakesItFromTheFirstForward) {
  AmericanNight night(kRates);
  night.add_american(30, 0);
  night.add_american(180, 0);
  for (Quote& q : night.table.quotes) q.underlying_price = quotes::kAbsent;
  const auto marked = night.mark();
  EXPECT_TRUE(holds(marked.record.message, "american without a spot")) << marked.record.message;
  ASSERT_EQ(marked.financing.size(), 2U);
  EXPECT_EQ(marked.financing[0].spot_origin, publish::Origin::inferred);
  // Parity of the quoted prices, whose puts hold premiums of a few cents.
  EXPECT_NEAR(marked.financing[0].spot, kSpot, 0.05);
}

TEST(MarkUnderlying, StatedBorrowDecidesTheForwardOfAnAmericanExpiry) {
  AmericanNight night(std::string(kRates) + "[underlying.HALYRD]\nborrow = 0.05\n");
  night.add_american(180);
  const auto marked = night.mark();
  ASSERT_EQ(marked.forwards.size(), 1U);
  EXPECT_EQ(marked.forwards[0].estimate.source, market::ForwardSource::curve);
  EXPECT_EQ(marked.financing[0].borrow_origin, publish::Origin::given);
  EXPECT_NEAR(marked.forwards[0].estimate.forward, kSpot * std::exp((kRate - 0.05) * years(180)),
              kForwardRounding);
  // Half a per cent of borrow is 24 cents of forward, the spreads are a cent: parity is broken.
  EXPECT_TRUE(holds(marked.record.message, "parity broken")) << marked.record.message;
}

TEST(MarkUnderlying, ForwardsAndBorrowsThatAmericanQuotesContradictAreFlagged) {
  for (const char* stated : {"forwards = {2031-09-10 = 150}", "borrow = 0.8", "borrow = -0.9"}) {
    AmericanNight night(std::string(kRates) + "[underlying.HALYRD]\n" + stated + "\n");
    night.add_american(180, 0);
    const auto marked = night.mark();
    EXPECT_TRUE(holds(marked.record.message, "parity broken")) << stated << marked.record.message;
    EXPECT_TRUE(holds(marked.record.message, "is spot or forward right"))
        << stated << marked.record.message;
  }
}

TEST(MarkUnderlying, RowsOfAnotherDayTellNoSpot) {
  AmericanNight night(kRates);
  night.add_american(180, 0);
  const std::size_t tonight = night.table.quotes.size();
  for (Quote& q : night.table.quotes) q.quote_time = kAsOf - 1min;
  for (std::size_t i = 0; i < 2 * tonight; ++i) {
    Quote old = night.table.quotes[i % tonight];
    old.quote_time = kAsOf - 72h;
    old.strike += 1;
    old.underlying_price = 0.9 * kSpot;
    old.line = static_cast<std::int64_t>(night.table.quotes.size()) + 2;
    night.table.quotes.push_back(old);
  }
  const auto marked = night.mark();
  ASSERT_EQ(marked.financing.size(), 1U);
  EXPECT_EQ(marked.financing[0].spot, kSpot);
}

TEST(MarkUnderlying, StatedCarryIsTheWholeYieldWhateverDividendsAFileHas) {
  Night night(std::string(kRates) + "spot = 100\n[underlying.HALYRD]\ncarry = 0.05\n");
  night.add_flat(180, {PutCall::call});
  auto resolved = resolve(night.config);
  ASSERT_TRUE(resolved.ok());
  resolved->dividends["HALYRD"] = {{in_days(30), market::DividendKind::cash, 2}};
  quotes::clean_quotes(night.table, kAsOf, night.config.clean);
  const auto chains = quotes::group_chains(night.table);
  const auto marked = mark_underlying(night.table, chains.at(0), night.config, *resolved);
  ASSERT_EQ(marked.forwards.size(), 1U);
  EXPECT_NEAR(marked.forwards[0].estimate.forward, 100 * std::exp((kRate - 0.05) * years(180)),
              kForwardRounding);
}

TEST(MarkUnderlying, ExpiryWhoseDividendsExceedTheSpotHasNoForward) {
  AmericanNight night(std::string(kRates) +
                      "[underlying.HALYRD]\nborrow = 0\ndividends = {2031-04-01 = 150}\n");
  night.add_american(180, 0);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::refused);
  EXPECT_EQ(night.count(Reason::no_forward), static_cast<std::int64_t>(night.table.quotes.size()));
  EXPECT_TRUE(marked.forwards.empty());
}

TEST(MarkUnderlying, MixedExercisesOfOneNightAreEachTakenAsTheyAre) {
  AmericanNight night(kRates);
  night.add_american(180, 0);
  night.add_flat(60);
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::published) << marked.record.message;
  ASSERT_EQ(marked.financing.size(), 2U);
  EXPECT_EQ(marked.financing[0].exercise, publish::ExerciseTaken::european);
  EXPECT_EQ(marked.financing[1].exercise, publish::ExerciseTaken::american);
}

TEST(MarkUnderlying, QuoteWorthWhatExerciseNowPaysHasAReasonAndNoVolatility) {
  AmericanNight night(kRates);
  night.add_american(180, 0);
  for (const double strike : {150.0, 160.0})
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      const double worth = side == PutCall::put ? strike - kSpot : 0.01;
      Quote& q = night.add(in_days(180), side, strike, worth - 0.005, worth + 0.005);
      q.exercise = quotes::Exercise::american;
      q.underlying_price = kSpot;
    }
  night.mark();
  int met = 0;
  for (const Quote& q : night.table.quotes) {
    if (q.put_call != PutCall::put || q.strike < 150) continue;
    ++met;
    EXPECT_EQ(q.reason, Reason::immediate_exercise);
    EXPECT_EQ(quotes::state_of(q.reason), quotes::State::spare);
    EXPECT_EQ(q.vol_bid, 0);
    EXPECT_TRUE(std::isnan(q.vol_mid));
  }
  EXPECT_EQ(met, 2);
}

TEST(MarkUnderlying, StatedExerciseWinsOverTheRows) {
  Night night("[underlying.HALYRD]\nexercise = 'european'\n");
  night.add_flat(60);
  for (Quote& q : night.table.quotes) q.exercise = quotes::Exercise::american;
  EXPECT_EQ(night.mark().record.status, publish::Status::published);
  EXPECT_EQ(night.table.quotes[0].exercise, quotes::Exercise::european);
}

TEST(MarkUnderlying, QuotesInVolAreTakenAsTheyStand) {
  Night night("spot = 100\nrates = {1Y = 0.03}\n");
  for (double strike = 80; strike <= 120; strike += 5)
    for (const PutCall side : {PutCall::call, PutCall::put})
      night.add(in_days(60), side, strike, kVol - kHalfSpread, kVol + kHalfSpread).quoted_in =
          quotes::QuotedIn::vol;
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::published) << marked.record.message;
  ASSERT_EQ(marked.forwards.size(), 1U);
  EXPECT_EQ(marked.forwards[0].estimate.source, market::ForwardSource::curve);
  EXPECT_NEAR(marked.forwards[0].estimate.forward, forward_of(60), kForwardRounding);
  EXPECT_EQ(marked.record.inside, marked.record.used);
  EXPECT_EQ(marked.record.used, 9);
  for (const auto& node : marked.grid)
    EXPECT_NEAR(node.support == publish::Support::extrapolated ? kVol : node.vol, kVol, kFlat);
}

TEST(MarkUnderlying, GivenForwardOfADateIsTaken) {
  Night night("[underlying.HALYRD]\nforwards = {2031-05-13 = 100.25}\n");
  night.add_flat(60);
  const auto marked = night.mark();
  ASSERT_EQ(marked.forwards.size(), 1U);
  EXPECT_EQ(marked.forwards[0].estimate.source, market::ForwardSource::given);
  EXPECT_EQ(marked.forwards[0].estimate.forward, 100.25);
}

TEST(MarkUnderlying, GivenForwardsKeepMorningAndAfternoonOfADateApart) {
  // The forward of the date, which sorts first, was once taken for the morning too.
  Night night(
      "[underlying.HALYRD]\n"
      "forwards = {2031-05-13 = 100.25, '2031-05-13T09:30:00Z' = 99.5}\n");
  const auto morning = in_days(60) - 6h - 30min;
  for (const auto& expiry : {morning, in_days(60)})
    for (const PutCall side : {PutCall::call, PutCall::put}) night.add(expiry, side, 100, 3, 3.5);
  const auto marked = night.mark();
  ASSERT_EQ(marked.forwards.size(), 2U);
  EXPECT_EQ(marked.forwards[0].expiry, morning);
  EXPECT_EQ(marked.forwards[0].estimate.forward, 99.5);
  EXPECT_EQ(marked.forwards[1].estimate.forward, 100.25);
}

TEST(MarkUnderlying, SpotIsAsStatedElseTheMiddleOfTheRowsElseTheNights) {
  const auto spot_of = [](const std::string& toml, std::vector<double> prices) {
    Night night(toml);
    night.add_flat(60);
    for (std::size_t i = 0; i < prices.size(); ++i)
      night.table.quotes[i].underlying_price = prices[i];
    return night.mark().surface.value().spot;
  };
  const std::string stated = "spot = 90\n[underlying.HALYRD]\nspot = 95\n";
  EXPECT_EQ(spot_of(stated, {99, 100, 500}), 95);
  EXPECT_EQ(spot_of("spot = 90\n", {99, 500, 100}), 100);
  EXPECT_EQ(spot_of("spot = 90\n", {}), 90);
  EXPECT_EQ(spot_of("", {}), std::nullopt);
}

TEST(MarkUnderlying, ArbitrageAmongTheQuotesIsFlaggedAndCounted) {
  Night night;
  night.add_flat(60);
  for (Quote& q : night.table.quotes) {
    if (q.put_call == PutCall::call && q.strike == 110) {
      q.bid += 3;
      q.ask += 3;
    }
  }
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::flagged);
  EXPECT_GT(marked.record.violations, 0);
  EXPECT_EQ(marked.record.violations, static_cast<std::int64_t>(marked.violations.size()));
  EXPECT_TRUE(holds(marked.record.message, "among the quotes")) << marked.record.message;
  for (const auto& v : marked.violations) EXPECT_EQ(v.scope, arbitrage::Scope::quotes);
}

TEST(MarkUnderlying, FirmSideOfAOneSidedQuoteCountsForArbitrage) {
  Night night;
  night.add_flat(60);
  // An ask far below what the neighbours bid, and no bid: left out of the fit, but it can be
  // bought.
  for (Quote& q : night.table.quotes) {
    if (q.put_call != PutCall::call || q.strike != 90) continue;
    q.bid = quotes::kAbsent;
    q.ask = 1;
  }
  const auto marked = night.mark();
  EXPECT_EQ(night.count(Reason::no_bid), 1);
  EXPECT_GT(marked.record.violations, 0);
}

TEST(MarkUnderlying, LoneQuoteIsALevel) {
  Night night("spot = 100\nrates = {1Y = 0.03}\n");
  night.add(in_days(60), PutCall::call, 105, 0.19, 0.21).quoted_in = quotes::QuotedIn::vol;
  const auto marked = night.mark();
  EXPECT_EQ(marked.record.status, publish::Status::published) << marked.record.message;
  EXPECT_EQ(marked.record.used, 1);
  EXPECT_EQ(marked.record.inside, 1);
}

TEST(MarkUnderlying, ObservedNodesAreNearUsedQuotesOnly) {
  Night night("[grid]\naxis = 'strike'\n");
  night.add_flat(60);
  for (Quote& q : night.table.quotes)
    if (q.strike == 90) q.bid = 0;
  std::map<double, publish::Support> supports;
  for (const auto& node : night.mark().grid) supports[node.strike] = node.support;
  EXPECT_EQ(supports.at(90), publish::Support::interpolated);
  EXPECT_EQ(supports.at(95), publish::Support::observed);
}

}  // namespace
}  // namespace duskgrid::night
