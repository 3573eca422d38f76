#include "pricing/american_dividend_batch.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <vector>

namespace duskgrid::pricing {
namespace {

double forward_of(const AmericanColumnTerms& t, std::span<const Dividend> dividends) {
  return market::forward_of({t.spot, t.rate, t.carry_yield, t.year_fraction}, dividends);
}

using quotes::PutCall;

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
const DividendInverter kInverter;
const AmericanColumnTerms kTerms{100, 0.04, 0.01, 0.75};
const std::vector<Dividend> kCash{{0.1, DividendKind::cash, 0.8},
                                  {0.35, DividendKind::cash, 0.8},
                                  {0.6, DividendKind::cash, 0.9}};
// Of the spot of 100; docs/american.md has what was measured.
constexpr double kEuropean = 1e-6 * 100, kAmerican = 2e-5 * 100;

struct Results {
  std::vector<double> vols, european;
  std::vector<AmericanVolStatus> statuses;
  AmericanCounts counts;
  bool operator==(const Results& other) const {
    return vols == other.vols && european == other.european && statuses == other.statuses;
  }
};

Results inverted(const DividendColumnTerms& terms, const std::vector<double>& strikes,
                 const std::vector<PutCall>& sides, const std::vector<double>& prices) {
  // Filled so that what is not written shows.
  Results r{std::vector<double>(prices.size(), kNaN),
            std::vector<double>(prices.size(), kNaN),
            std::vector<AmericanVolStatus>(prices.size(), AmericanVolStatus::not_converged),
            {}};
  r.counts = kInverter.invert(terms, {strikes, sides, prices}, {r.vols, r.european, r.statuses});
  return r;
}

AmericanTerms terms_of(const AmericanColumnTerms& t, PutCall side, double strike) {
  return {side, t.spot, strike, t.rate, t.carry_yield, t.year_fraction};
}

double priced(const AmericanColumnTerms& t, PutCall side, double strike, double vol,
              const std::vector<Dividend>& dividends, Style style = Style::american) {
  DividendOptions options;
  options.style = style;
  return price_with_dividends(terms_of(t, side, strike), vol, dividends, options).price;
}

struct Chain {
  std::vector<double> strikes, prices;
  std::vector<PutCall> sides;
};

Chain chain_of(const AmericanColumnTerms& t, const std::vector<Dividend>& dividends) {
  Chain c;
  for (double strike = 80; strike <= 120; strike += 10)
    for (const auto side : {PutCall::put, PutCall::call}) {
      c.strikes.push_back(strike);
      c.sides.push_back(side);
      c.prices.push_back(priced(t, side, strike, 0.25 - 0.2 * std::log(strike / 100), dividends));
    }
  return c;
}

TEST(DividendInverter, FindsTheVolsAndEuropeanPricesOfAChain) {
  const Chain c = chain_of(kTerms, kCash);
  const auto r = inverted({kTerms, kCash}, c.strikes, c.sides, c.prices);
  for (std::size_t i = 0; i < c.prices.size(); ++i) {
    ASSERT_EQ(r.statuses[i], AmericanVolStatus::ok) << i;
    EXPECT_NEAR(priced(kTerms, c.sides[i], c.strikes[i], r.vols[i], kCash), c.prices[i], kAmerican)
        << c.strikes[i];
    EXPECT_NEAR(priced(kTerms, c.sides[i], c.strikes[i], r.vols[i], kCash, Style::european),
                r.european[i], kEuropean)
        << c.strikes[i];
  }
}

TEST(DividendInverter, WithoutADividendInsideIsTheInverterOfContinuousCarryToTheBit) {
  const std::vector<double> strikes{90, 100, 115}, prices{2, 6, 16};
  const std::vector<PutCall> sides(3, PutCall::put);
  const std::vector<Dividend> outside{{0, DividendKind::cash, 5}, {0.75, DividendKind::cash, 5}};
  const auto r = inverted({kTerms, outside}, strikes, sides, prices);
  std::vector<double> vols(3), european(3);
  std::vector<AmericanVolStatus> statuses(3);
  AmericanInverter().invert(kTerms, {strikes, sides, prices}, {vols, european, statuses});
  EXPECT_EQ(r.vols, vols);
  EXPECT_EQ(r.european, european);
  EXPECT_EQ(r.statuses, statuses);
}

TEST(DividendInverter, DividendsNextToNothingChangeNothing) {
  const std::vector<double> strikes{85, 100, 112};
  const std::vector<PutCall> sides{PutCall::put, PutCall::put, PutCall::call};
  std::vector<double> prices;
  for (std::size_t i = 0; i < 3; ++i)
    prices.push_back(AmericanEngine().price(terms_of(kTerms, sides[i], strikes[i]), 0.3).price);
  const auto r = inverted({kTerms, std::vector<Dividend>{{0.3, DividendKind::cash, 1e-9}}}, strikes,
                          sides, prices);
  for (std::size_t i = 0; i < 3; ++i) {
    const auto p = AmericanEngine().price(terms_of(kTerms, sides[i], strikes[i]), 0.3);
    EXPECT_NEAR(r.european[i], p.european, kAmerican) << i;
  }
}

TEST(DividendInverter, APutThatIsNeverExercisedIsWorthItsEuropeanPrice) {
  const AmericanColumnTerms terms{100, -0.01, 0, 0.75};
  const std::vector<double> strikes{95, 100, 110}, prices{6, 9, 15};
  const auto r = inverted({terms, kCash}, strikes, std::vector<PutCall>(3, PutCall::put), prices);
  for (std::size_t i = 0; i < 3; ++i) {
    ASSERT_EQ(r.statuses[i], AmericanVolStatus::ok);
    EXPECT_EQ(r.european[i], prices[i]);
    EXPECT_NEAR(priced(terms, PutCall::put, strikes[i], r.vols[i], kCash, Style::european),
                prices[i], kEuropean);
  }
}

// C - P = D (F - K), both at the same volatility.
TEST(DividendInverter, EuropeanPricesKeepParity) {
  const double vol = 0.28;
  std::vector<double> strikes, prices;
  std::vector<PutCall> sides;
  for (const double strike : {90.0, 100.0, 110.0})
    for (const auto side : {PutCall::call, PutCall::put}) {
      strikes.push_back(strike);
      sides.push_back(side);
      prices.push_back(priced(kTerms, side, strike, vol, kCash));
    }
  const auto r = inverted({kTerms, kCash}, strikes, sides, prices);
  const double forward = forward_of(kTerms, kCash);
  const double discount = std::exp(-kTerms.rate * kTerms.year_fraction);
  for (std::size_t i = 0; i < prices.size(); i += 2)
    EXPECT_NEAR(r.european[i] - r.european[i + 1], discount * (forward - strikes[i]), 2 * kAmerican)
        << strikes[i];
}

TEST(DividendInverter, TakesSharesOfTheSpotAsAFallOfTheForward) {
  const std::vector<Dividend> shares{{0.2, DividendKind::proportional, 0.01},
                                     {0.5, DividendKind::proportional, 0.02}};
  EXPECT_NEAR(forward_of(kTerms, shares), 100 * 0.99 * 0.98 * std::exp(0.0225), 1e-10);
  const Chain c = chain_of(kTerms, shares);
  const auto r = inverted({kTerms, shares}, c.strikes, c.sides, c.prices);
  for (std::size_t i = 0; i < c.prices.size(); ++i) {
    ASSERT_EQ(r.statuses[i], AmericanVolStatus::ok) << i;
    // Black's price exactly, to what ends the search.
    const double black =
        black_price({c.sides[i], forward_of(kTerms, shares), c.strikes[i], std::exp(-0.03)},
                    r.vols[i] * std::sqrt(0.75));
    EXPECT_NEAR(r.european[i], black, 1e-9);
    EXPECT_NEAR(priced(kTerms, c.sides[i], c.strikes[i], r.vols[i], shares), c.prices[i],
                kAmerican);
  }
}

TEST(DividendInverter, NamesWhatHasNoVolatility) {
  using enum AmericanVolStatus;
  // With a year to the dividend, a put far in the money is exercised now.
  const AmericanColumnTerms terms{100, 0.08, 0, 1.5};
  const std::vector<Dividend> late{{1.4, DividendKind::cash, 1}};
  const std::vector<double> strikes{140, 140, 140, 100, -5, 100, 80},
      prices{40, 39, 140, kNaN, 3, 0, 10};
  std::vector<PutCall> sides(6, PutCall::put);
  sides.push_back(PutCall::call);
  const AmericanVolStatus wanted[] = {immediate_exercise, below_intrinsic, above_bound,
                                      not_finite,         not_finite,      below_intrinsic,
                                      below_intrinsic};
  const auto r = inverted({terms, late}, strikes, sides, prices);
  for (std::size_t i = 0; i < prices.size(); ++i) {
    EXPECT_EQ(r.statuses[i], wanted[i]) << i << ' ' << word(r.statuses[i]);
    EXPECT_EQ(r.vols[i], 0) << i;
    EXPECT_EQ(r.european[i], 0) << i;
  }
}

TEST(DividendInverter, RefusesTwoBoundariesAndUnsoundTerms) {
  const std::vector<double> strikes{100}, prices{5};
  const std::vector<PutCall> sides{PutCall::put};
  EXPECT_EQ(inverted({{100, -0.01, -0.05, 0.75}, kCash}, strikes, sides, prices).statuses[0],
            AmericanVolStatus::two_boundaries);
  const auto status = [&](const AmericanColumnTerms& terms, const Dividend& dividend) {
    const std::vector<Dividend> one{dividend};
    return inverted({terms, one}, strikes, sides, prices).statuses[0];
  };
  const Dividend sound{0.3, DividendKind::cash, 1};
  for (const Dividend& bad :
       {Dividend{0.3, DividendKind::cash, kNaN}, Dividend{kNaN, DividendKind::cash, 1},
        Dividend{0.3, DividendKind::cash, -1}, Dividend{0.3, DividendKind::cash, 101},
        Dividend{0.3, DividendKind::proportional, 1}})
    EXPECT_EQ(status(kTerms, bad), AmericanVolStatus::not_finite);
  for (const AmericanColumnTerms& bad :
       {AmericanColumnTerms{kNaN, 0.04, 0, 1}, AmericanColumnTerms{100, kNaN, 0, 1},
        AmericanColumnTerms{100, 0.04, kNaN, 1}, AmericanColumnTerms{100, 0.04, 0, kNaN}})
    EXPECT_EQ(status(bad, sound), AmericanVolStatus::not_finite);
}

TEST(DividendInverter, GivesTheSameBitsOnEveryTarget) {
  const Chain c = chain_of(kTerms, kCash);
  use_batch_target("");
  const auto widest = inverted({kTerms, kCash}, c.strikes, c.sides, c.prices);
  for (const auto& target : batch_targets()) {
    use_batch_target(target);
    EXPECT_TRUE(inverted({kTerms, kCash}, c.strikes, c.sides, c.prices) == widest) << target;
  }
  use_batch_target("");
}

// In the money before an ex-date the price hardly moves with the volatility at first, and Newton's
// steps by Black's vega creep.
TEST(DividendInverterSearch, FindsTheVolatilityOfACallBeforeItsExDate) {
  const std::vector<Dividend> dividends{{3.0 / 8760, DividendKind::cash, 5}};
  const AmericanColumnTerms terms{100, 0.03, 0, 840.0 / 8760};
  constexpr double kVol = 0.48;
  const std::vector<double> strikes{92.5};
  const std::vector<PutCall> sides{PutCall::call};
  const auto priced = price_with_dividends(
      {PutCall::call, 100, 92.5, terms.rate, terms.carry_yield, terms.year_fraction}, kVol,
      dividends);
  ASSERT_EQ(priced.status, AmericanStatus::ok);
  const std::vector<double> prices{priced.price};
  std::vector<double> vols(1), europeans(1);
  std::vector<AmericanVolStatus> statuses(1);
  DividendInverter().invert({terms, dividends}, {strikes, sides, prices},
                            {vols, europeans, statuses});
  ASSERT_EQ(statuses[0], AmericanVolStatus::ok) << word(statuses[0]);
  // 3e-5 of the spot, within which 99 in 100 prices are met (docs/american.md), over a vega
  // of 1.23.
  EXPECT_NEAR(vols[0], kVol, 2.5e-3);
}

}  // namespace
}  // namespace duskgrid::pricing
