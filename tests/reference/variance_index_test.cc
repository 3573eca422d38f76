// The worked example of the index exchange's volatility-index white paper (editions of 2014 to
// 2019), read as a user would have it read: forwards from parity, and the two strip variances to
// all printed digits. Quotes: white_paper_near.csv, white_paper_next.csv (source in README.md).
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "market/day_count.h"
#include "market/parity.h"
#include "quotes/load.h"

namespace duskgrid {
namespace {

using quotes::Quote;

const quotes::Instant kAsOf =
    std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + std::chrono::hours{14};

struct Example {
  const char* file;
  int minutes;
  std::size_t strikes;
  double rate;
  double forward, k0, variance;
  double first_strike, last_strike;
  int options;
};
constexpr Example kNear{
    "white_paper_near.csv", 35924, 186, 0.000305, 1962.89996, 1960, 0.01846292, 1370, 2125, 146};
constexpr Example kNext{
    "white_paper_next.csv", 46394, 128, 0.000286, 1962.40006, 1960, 0.01882101, 1275, 2200, 122};

// One listed strike.
struct Row {
  double strike, call_bid, call_ask, put_bid, put_ask;
  double call() const { return 0.5 * (call_bid + call_ask); }
  double put() const { return 0.5 * (put_bid + put_ask); }
};

struct Term {
  double t;
  std::vector<Row> rows;  // by strike
};

Term load(const Example& example) {
  const auto expiry = kAsOf + std::chrono::minutes{example.minutes};
  quotes::SourceOptions source;
  source.files = {std::string(DUSKGRID_TEST_DATA) + "/" + example.file};
  source.fixed = {{"underlying", "INDEX"},
                  {"expiry", std::to_string(expiry.time_since_epoch().count())}};
  const auto loaded = quotes::load_quotes({source}, {});
  EXPECT_TRUE(loaded.ok()) << loaded.failure().text();
  Term term{market::year_fraction(kAsOf, loaded->table.quotes.at(0).expiry), {}};
  for (const Quote& q : loaded->table.quotes) {
    EXPECT_EQ(q.reason, quotes::Reason::none) << q.line;
    EXPECT_EQ(q.expiry, expiry);
    if (q.put_call == quotes::PutCall::call) {
      term.rows.push_back({q.strike, q.bid, q.ask, 0, 0});
    } else {
      EXPECT_EQ(term.rows.back().strike, q.strike);  // call before put of one row
      term.rows.back().put_bid = q.bid;
      term.rows.back().put_ask = q.ask;
    }
  }
  return term;
}

market::ExpiryPairs pairs_of(const Term& term) {
  market::ExpiryPairs out{.year_fraction = term.t, .pairs = {}, .given_forward = {}};
  for (const Row& r : term.rows)
    if (r.call_bid > 0 && r.put_bid > 0)
      out.pairs.push_back(
          {r.strike, r.call_bid - r.put_ask, r.call_ask - r.put_bid, r.call() + r.put()});
  return out;
}

// The white paper's own forward: parity of mids at the strike where they are closest.
double white_paper_forward(const Term& term, double rate) {
  const Row& r =
      *std::min_element(term.rows.begin(), term.rows.end(), [](const Row& a, const Row& b) {
        return std::abs(a.call() - a.put()) < std::abs(b.call() - b.put());
      });
  return r.strike + std::exp(rate * term.t) * (r.call() - r.put());
}

struct Strip {
  std::vector<std::pair<double, double>> options;  // strike and mid, by strike
  double k0;
};

// Out-of-the-money mids outwards from K0; zero bids are skipped and two in a row end the walk.
Strip strip_of(const Term& term, double forward) {
  const auto above = std::find_if(term.rows.begin(), term.rows.end(),
                                  [&](const Row& r) { return r.strike > forward; });
  const auto money = above - 1;
  Strip out{{{money->strike, 0.5 * (money->call() + money->put())}}, money->strike};
  int zeros = 0;
  for (auto r = money; r != term.rows.begin() && zeros < 2;) {
    --r;
    zeros = r->put_bid > 0 ? 0 : zeros + 1;
    if (zeros == 0) out.options.insert(out.options.begin(), {r->strike, r->put()});
  }
  zeros = 0;
  for (auto r = above; r != term.rows.end() && zeros < 2; ++r) {
    zeros = r->call_bid > 0 ? 0 : zeros + 1;
    if (zeros == 0) out.options.push_back({r->strike, r->call()});
  }
  return out;
}

double variance_of(const Strip& strip, double forward, double rate, double t) {
  const auto& o = strip.options;
  double sum = 0;
  for (std::size_t i = 0; i < o.size(); ++i) {
    const std::size_t a = i == 0 ? 0 : i - 1, b = std::min(i + 1, o.size() - 1);
    const double gap = (o[b].first - o[a].first) / static_cast<double>(b - a);
    sum += gap / (o[i].first * o[i].first) * o[i].second;
  }
  const double off = forward / strip.k0 - 1;
  return 2 / t * std::exp(rate * t) * sum - off * off / t;
}

class VarianceIndex : public ::testing::TestWithParam<Example> {};

TEST_P(VarianceIndex, EveryListedStrikeIsRead) {
  EXPECT_EQ(load(GetParam()).rows.size(), GetParam().strikes);
}

TEST_P(VarianceIndex, ForwardIsNearThePrintedOneAndInsideTheNearIntervals) {
  // The white paper takes one pair's mids; its spread leaves +-1 or more. A quarter is two ticks of
  // it.
  constexpr double kNearby = 0.25;
  const Example& example = GetParam();
  const auto pairs = pairs_of(load(example));
  const auto curve = market::ZeroCurve::make({{1.0, example.rate}});
  for (const bool curve_given : {true, false}) {
    market::KnownMarket known;
    if (curve_given) known.curve = *curve;
    const auto found = market::estimate_forwards(std::span(&pairs, 1), known, {});
    ASSERT_TRUE(found.at(0));
    const auto& e = *found[0];
    EXPECT_NEAR(e.forward, example.forward, kNearby) << curve_given;
    EXPECT_EQ(e.breaks, 0) << curve_given;
    EXPECT_LE(e.lowest_forward, e.highest_forward) << curve_given;
    EXPECT_GE(e.forward, e.lowest_forward) << curve_given;
    EXPECT_LE(e.forward, e.highest_forward) << curve_given;
    std::cout << example.file << (curve_given ? " rate given" : " rate from the quotes")
              << ": forward " << e.forward << " in [" << e.lowest_forward << ", "
              << e.highest_forward << "], rate " << e.zero_rate << ", " << e.pairs << " pairs\n";
  }
}

TEST_P(VarianceIndex, StripVarianceAgreesToAllPrintedDigits) {
  const Example& example = GetParam();
  const Term term = load(example);
  const double forward = white_paper_forward(term, example.rate);
  EXPECT_NEAR(forward, example.forward, 0.5e-5);  // five decimals printed
  const Strip strip = strip_of(term, forward);
  EXPECT_EQ(strip.k0, example.k0);
  EXPECT_EQ(strip.options.front().first, example.first_strike);
  EXPECT_EQ(strip.options.back().first, example.last_strike);
  EXPECT_EQ(static_cast<int>(strip.options.size()), example.options);
  EXPECT_NEAR(variance_of(strip, forward, example.rate, term.t), example.variance,
              0.5e-8);  // eight decimals
}

INSTANTIATE_TEST_SUITE_P(WhitePaper, VarianceIndex, ::testing::Values(kNear, kNext),
                         [](const auto& which) {
                           return which.param.minutes < 40000 ? "Near" : "Next";
                         });

// 30 days between the two: 13.69 printed, from memory; 13.685821 recomputed.
TEST(VarianceIndexOfBothTerms, IsThePrintedIndex) {
  constexpr double kMonth = 43200, kYear = 525600;
  double total[2], minutes[2];
  int i = 0;
  for (const Example& example : {kNear, kNext}) {
    const Term term = load(example);
    const double forward = white_paper_forward(term, example.rate);
    total[i] = term.t * variance_of(strip_of(term, forward), forward, example.rate, term.t);
    minutes[i++] = example.minutes;
  }
  const double weight = (minutes[1] - kMonth) / (minutes[1] - minutes[0]);
  const double index =
      100 * std::sqrt((weight * total[0] + (1 - weight) * total[1]) * kYear / kMonth);
  EXPECT_NEAR(index, 13.69, 0.005);
  EXPECT_NEAR(index, 13.685821, 0.6e-6);
}

}  // namespace
}  // namespace duskgrid
