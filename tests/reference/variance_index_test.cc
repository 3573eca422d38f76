// The worked example of the index exchange's volatility-index white paper (editions of 2014 to
// 2019), read as a user would have it read: forwards from parity, and the two strip variances to
// all printed digits. Quotes: white_paper_near.csv, white_paper_next.csv (source in README.md).
#include <gtest/gtest.h>

#include <algorithm>
#include <boost/math/quadrature/gauss_kronrod.hpp>
#include <cmath>
#include <functional>

#include "arbitrage/certificate.h"
#include "market/day_count.h"
#include "market/parity.h"
#include "pricing/invert.h"
#include "quotes/load.h"
#include "surface/derived.h"
#include "surface/fit.h"

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

// One option of the strip as the fit takes it.
surface::FitQuote fit_quote(const pricing::BlackTerms& terms, double bid, double ask, double t) {
  const auto vol = [&](double price) { return pricing::implied_vol(terms, price, t).vol; };
  const double low = vol(bid), high = vol(ask);
  return {std::log(terms.strike / terms.forward), vol(0.5 * (bid + ask)), 0.5 * (high - low), low,
          high};
}

// The same strip at bids, at asks and at a surface's prices: at K0 call and put share the place.
Strip repriced(const Strip& strip, const std::function<double(double, quotes::PutCall)>& price) {
  Strip out = strip;
  for (auto& [strike, value] : out.options) {
    const double put = price(strike, quotes::PutCall::put);
    const double call = price(strike, quotes::PutCall::call);
    value = strike < strip.k0 ? put : strike > strip.k0 ? call : 0.5 * (put + call);
  }
  return out;
}

// The swap of the fitted surface is an integral over all strikes. The strip leaves out what is
// beyond its ends and joins its strikes by straight lines; both are computed from the surface, and
// what is left must lie within what the spreads allow.
TEST_P(VarianceIndex, SurfaceSwapAgreesWithinTheStripsOwnErrors) {
  const Example& example = GetParam();
  const Term term = load(example);
  const double forward = white_paper_forward(term, example.rate);
  const double discount = std::exp(-example.rate * term.t);
  const Strip strip = strip_of(term, forward);
  surface::FitSlice slice{term.t, {}};
  for (const Row& r : term.rows) {
    const bool put = r.strike < forward;
    const double bid = put ? r.put_bid : r.call_bid, ask = put ? r.put_ask : r.call_ask;
    if (!(bid > 0)) continue;
    slice.quotes.push_back(
        fit_quote({put ? quotes::PutCall::put : quotes::PutCall::call, forward, r.strike, discount},
                  bid, ask, term.t));
  }
  const auto fit = surface::fit_surface(std::span(&slice, 1), {});
  ASSERT_TRUE(fit.ok());
  const surface::Surface fitted{"INDEX",
                                forward,
                                {{kAsOf, term.t, forward, discount, fit->slices[0].backbone,
                                  slice.quotes.front().k, slice.quotes.back().k,
                                  fit->slices[0].overlay}}};
  EXPECT_TRUE(arbitrage::certify(fitted).certified);
  const surface::TimedSmile smile(fitted, term.t);
  std::size_t inside = 0;
  for (const auto& q : slice.quotes) {
    const double vol = std::sqrt(smile.at(q.k).w / term.t);
    inside += vol >= q.vol_bid && vol <= q.vol_ask ? 1 : 0;
  }
  EXPECT_EQ(inside, slice.quotes.size());

  const auto price = [&](double strike, quotes::PutCall side) {
    return pricing::black_price({side, forward, strike, discount},
                                std::sqrt(smile.at(std::log(strike / forward)).w));
  };
  const auto strip_variance = [&](const Strip& s) {
    return variance_of(s, forward, example.rate, term.t);
  };
  const auto integral = [&](double low, double high) {
    using Rule = boost::math::quadrature::gauss_kronrod<double, 31>;
    const auto weighted = [&](double strike) {
      const auto side = strike < forward ? quotes::PutCall::put : quotes::PutCall::call;
      return price(strike, side) / (strike * strike);
    };
    double sum = 0;
    constexpr int kPieces = 64;  // evenly in ln K, which the knots are too, more or less
    for (int i = 0; i < kPieces; ++i)
      sum += Rule::integrate(weighted, low * std::pow(high / low, double(i) / kPieces),
                             low * std::pow(high / low, double(i + 1) / kPieces), 6, 1e-10);
    return 2 / (term.t * discount) * sum;
  };
  const double swap = surface::variance_swap(smile)->variance;
  constexpr double kFar = 8;  // in ln K beyond both ends: nothing is left there
  const double first = strip.options.front().first, last = strip.options.back().first;
  const double beyond =
      integral(first * std::exp(-kFar), first) + integral(last, last * std::exp(kFar));
  const double on_strikes = strip_variance(repriced(strip, price));
  const double spacing = on_strikes - (swap - beyond);
  const auto firm = [&](bool asks) {
    return strip_variance(repriced(strip, [&](double strike, quotes::PutCall side) {
      const auto r = std::find_if(term.rows.begin(), term.rows.end(),
                                  [&](const Row& row) { return row.strike == strike; });
      const bool put = side == quotes::PutCall::put;
      return asks ? (put ? r->put_ask : r->call_ask) : (put ? r->put_bid : r->call_bid);
    }));
  };
  std::cout << example.file << ": swap variance " << swap << " (strip " << example.variance
            << "), beyond the strip " << beyond << ", spacing " << spacing << ", the strip at bids "
            << firm(false) << ", on the surface " << on_strikes << ", at asks " << firm(true)
            << '\n';
  // The surface is inside every spread of the strip, but for the one at K0 that is not the fit's.
  EXPECT_GE(on_strikes, firm(false));
  EXPECT_LE(on_strikes, firm(true));
  const double mids = on_strikes - example.variance;  // where in the spreads the surface runs
  const double half_spreads = 0.5 * (firm(true) - firm(false));
  EXPECT_LT(std::abs(mids), half_spreads);
  // swap = strip + mids - spacing + beyond: the quadratures' own error is all that is left.
  EXPECT_NEAR(swap, example.variance + mids - spacing + beyond, 1e-9);
  EXPECT_LE(std::abs(swap - example.variance), std::abs(beyond) + std::abs(spacing) + half_spreads);
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
