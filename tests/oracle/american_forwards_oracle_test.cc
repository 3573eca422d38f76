// Whole American chains, with cash and proportional dividends and a borrow, priced by the finite
// differences of pricing/american_dividends.h, put through the pipeline's market stage and
// selection: is the borrow that made them found again, and the volatility? The prices are
// independent of what inverts them, which tables premiums.
#include <fmt/format.h>
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <random>

#include "market/day_count.h"
#include "night/mark.h"
#include "pricing/american_dividends.h"

namespace duskgrid::night {
namespace {

using quotes::PutCall;
using quotes::Quote;
using namespace std::chrono_literals;

const quotes::Instant kAsOf = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;

// DUSKGRID_AMERICAN_CASES asks for more; one case is a chain of some 20 prices.
int chain_count() {
  const char* asked = std::getenv("DUSKGRID_AMERICAN_CASES");
  return asked ? std::max(1, std::atoi(asked) / 20) : 12;
}

struct Made {
  double spot, rate, borrow, vol, half_spread;
  quotes::Instant expiry;
  std::vector<market::DatedDividend> dividends;
};

Made draw(std::mt19937_64& random, int i) {
  std::uniform_real_distribution<double> unit(0, 1);
  Made m{};
  m.spot = std::exp(2.5 + 3 * unit(random));
  m.rate = 0.06 * unit(random);
  m.borrow = i % 3 == 0 ? 0.0 : (i % 3 == 1 ? 0.02 : 0.15) * unit(random);
  m.vol = 0.15 + 0.45 * unit(random);
  m.half_spread = (0.0005 + 0.002 * unit(random)) * m.spot;
  m.expiry = kAsOf + std::chrono::hours{24 * static_cast<int>(20 + 500 * unit(random))};
  const auto kind = i % 4 == 3 ? market::DividendKind::proportional : market::DividendKind::cash;
  const double share = 0.002 + 0.013 * unit(random);
  const double amount = kind == market::DividendKind::cash ? share * m.spot : share;
  const auto first = std::chrono::hours{24 * static_cast<int>(2 + 80 * unit(random))};
  for (int d = 0; d < 6; ++d) m.dividends.push_back({kAsOf + first + d * 2184h, kind, amount});
  return m;
}

// Bids and asks around the mids of nine strikes, within one deviation of the money.
quotes::QuoteTable quotes_of(const Made& m, double t) {
  quotes::QuoteTable table;
  table.files = {"a.csv"};
  table.underlyings = {"HALYRD"};
  const auto dividends = market::dividends_after(kAsOf, m.dividends);
  for (int i = -4; i <= 4; ++i)
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      Quote q;
      q.file = 0;
      q.line = static_cast<std::int64_t>(table.quotes.size()) + 2;
      q.underlying = 0;
      q.expiry = m.expiry;
      q.put_call = side;
      q.exercise = quotes::Exercise::american;
      q.underlying_price = m.spot;
      q.strike = m.spot * (1 + 0.2 * m.vol * std::sqrt(t) * i);
      const auto priced = pricing::price_with_dividends(
          {side, m.spot, q.strike, m.rate, m.borrow, t}, m.vol, dividends);
      EXPECT_EQ(priced.status, pricing::AmericanStatus::ok);
      q.bid = priced.price - m.half_spread;
      q.ask = priced.price + m.half_spread;
      table.quotes.push_back(q);
    }
  return table;
}

TEST(AmericanChains, BorrowBehindDividendsIsFoundAgain) {
  std::mt19937_64 random(20310314);
  double worst = 0;
  for (int i = 0; i < chain_count(); ++i) {
    const Made m = draw(random, i);
    const double t = market::year_fraction(kAsOf, m.expiry);
    auto table = quotes_of(m, t);
    auto config =
        parse_config(fmt::format("as_of = '2031-03-14T21:00:00Z'\nrates = {{1Y = {}}}\n", m.rate),
                     "night.toml", "");
    ASSERT_TRUE(config.ok());
    auto night = resolve(*config);
    ASSERT_TRUE(night.ok());
    night->dividends["HALYRD"] = m.dividends;
    const auto chains = quotes::group_chains(table);
    const auto marked = mark_underlying(table, chains.at(0), *config, *night);
    ASSERT_EQ(marked.forwards.size(), 1u);
    const double forward = market::forward_of({m.spot, m.rate, m.borrow, t},
                                              market::dividends_after(kAsOf, m.dividends));
    const double miss = std::abs(marked.forwards[0].estimate.forward - forward);
    worst = std::max(worst, miss / m.half_spread);
    // What is asked of the forward: a tenth of the half-spread near the money.
    EXPECT_LE(miss, 0.1 * m.half_spread)
        << i << ": spot " << m.spot << " rate " << m.rate << " borrow " << m.borrow << " vol "
        << m.vol << " t " << t << " dividend " << m.dividends[0].amount;
    EXPECT_EQ(marked.financing[0].exercise, publish::ExerciseTaken::american);
    EXPECT_EQ(marked.financing[0].borrow_origin, publish::Origin::inferred);
    EXPECT_EQ(marked.record.inside, marked.record.used);
    EXPECT_GE(marked.record.used, 8);
  }
  fmt::print("forwards of American chains: worst miss {:.4f} half-spreads\n", worst);
}

}  // namespace
}  // namespace duskgrid::night
