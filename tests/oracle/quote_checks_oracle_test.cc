// Quotes from random trees, exact and with noise: every break that is reported must be one by its
// own legs, and exact prices must have none.
#include <gtest/gtest.h>

#include <algorithm>
#include <limits>
#include <map>
#include <random>

#include "../unit/arbitrage/trade_payoffs.h"
#include "arbitrage/quote_checks.h"

namespace duskgrid::arbitrage {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

quotes::Instant expiry_at(double t) {
  return quotes::Instant{} + std::chrono::seconds{static_cast<std::int64_t>(t * 31536000)};
}

// Random terminal prices on a tree price every option free of arbitrage; noise then breaks some.
// Each break reported must be one by its own legs, for the amount stated.
class RandomTrees : public ::testing::TestWithParam<bool> {};

std::vector<QuotedSlice> noisy_tree(std::mt19937& random, bool american) {
  std::uniform_real_distribution<double> unit(0, 1);
  std::vector<QuotedSlice> chain;
  std::vector<double> nodes{100};
  double t = 0;
  for (int level = 0; level < 3; ++level) {
    std::vector<double> next;
    const double jump = 0.05 + 0.15 * unit(random);
    for (const double node : nodes)  // a fair step either way keeps the mean
      next.insert(next.end(), {node * (1 + jump), node * (1 - jump)});
    nodes = std::move(next);
    t += 0.1 + 0.5 * unit(random);
    const double growth = std::exp(0.02 * t), discount = std::exp(-0.03 * t);
    QuotedSlice s{expiry_at(t), t, 100 * growth, discount, american, {}};
    for (double strike = 75; strike <= 125; strike += 5) {
      double call = 0, put = 0;
      for (const double node : nodes) {
        call += std::max(0.0, node * growth - strike) / static_cast<double>(nodes.size());
        put += std::max(0.0, strike - node * growth) / static_cast<double>(nodes.size());
      }
      const auto quote = [&](double value) {
        const double middle = discount * value + 0.3 * (unit(random) - 0.5);
        const double half = 0.12 * unit(random);
        return std::pair(middle - half, unit(random) < 0.1 ? kNaN : middle + half);
      };
      const auto [call_bid, call_ask] = quote(call);
      const auto [put_bid, put_ask] = quote(put);
      s.strikes.push_back({strike, call_bid, call_ask, put_bid, put_ask});
    }
    chain.push_back(std::move(s));
  }
  return chain;
}

TEST_P(RandomTrees, EveryBreakReportedLocksInItsAmountByItsOwnLegs) {
  std::map<Kind, int> seen;
  for (unsigned seed = 1; seed <= 300; ++seed) {
    std::mt19937 random(seed);
    const auto chain = noisy_tree(random, GetParam());
    for (const Violation& v : check_quotes(chain)) {
      ++seen[v.kind];
      const auto slice_of = [&](quotes::Instant expiry) -> const QuotedSlice& {
        return *std::find_if(chain.begin(), chain.end(),
                             [&](const auto& s) { return s.expiry == expiry; });
      };
      const QuotedSlice& s = slice_of(v.expiry);
      const double alone = v.kind == Kind::calendar ? locked_in_calendar(v, s, slice_of(v.expiry_2))
                                                    : locked_in(v, s);
      EXPECT_GT(v.amount, 0) << word(v.kind) << " seed " << seed;
      EXPECT_NEAR(alone, v.amount, 1e-9) << word(v.kind) << " seed " << seed;
    }
  }
  for (const Kind kind : {Kind::vertical, Kind::butterfly, Kind::calendar})
    EXPECT_GT(seen[kind], 20) << word(kind);
  EXPECT_EQ(seen[Kind::parity] > 20 && seen[Kind::box] > 20, !GetParam());
}

TEST(CheckQuotes, TreesWithoutNoiseAreClean) {
  for (unsigned seed = 1; seed <= 100; ++seed) {
    std::mt19937 random(seed);
    auto chain = noisy_tree(random, false);
    std::mt19937 again(seed);
    // Exact values: the noise and the spreads replaced by those of the tree itself.
    std::uniform_real_distribution<double> unit(0, 1);
    std::vector<double> nodes{100};
    for (QuotedSlice& s : chain) {
      std::vector<double> next;
      const double jump = 0.05 + 0.15 * unit(again);
      for (const double node : nodes)
        next.insert(next.end(), {node * (1 + jump), node * (1 - jump)});
      nodes = std::move(next);
      for (QuotedStrike& q : s.strikes) {
        double call = 0, put = 0;
        for (const double node : nodes) {
          call +=
              std::max(0.0, node * s.forward / 100 - q.strike) / static_cast<double>(nodes.size());
          put +=
              std::max(0.0, q.strike - node * s.forward / 100) / static_cast<double>(nodes.size());
        }
        q.call_bid = q.call_ask = s.discount_factor * call;
        q.put_bid = q.put_ask = s.discount_factor * put;
      }
    }
    const auto found = check_quotes(chain);
    EXPECT_TRUE(found.empty()) << seed << ' ' << word(found[0].kind) << ' ' << found[0].amount;
  }
}

INSTANTIATE_TEST_SUITE_P(EuropeanAndAmerican, RandomTrees, ::testing::Bool(),
                         [](const auto& which) { return which.param ? "American" : "European"; });

}  // namespace
}  // namespace duskgrid::arbitrage
