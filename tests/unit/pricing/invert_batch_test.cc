#include "pricing/invert_batch.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <random>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr unsigned kSeed = 14;

struct Chain {
  ColumnTerms terms{100, 0.98, 0.25};
  std::vector<double> strikes, prices;
  std::vector<PutCall> put_calls;
  PriceColumns columns() const { return {strikes, put_calls, prices}; }
};

// Prices of all kinds: sound, below intrinsic, above the bound, not finite, tiny.
Chain mixed_chain(std::size_t count) {
  std::mt19937_64 random(kSeed);
  std::uniform_real_distribution<double> unit(0, 1);
  Chain chain;
  for (std::size_t i = 0; i < count; ++i) {
    const double strike = i % 50 == 0 ? 100 : 100 * std::exp(3 * (unit(random) - 0.5));
    const auto side = unit(random) < 0.5 ? PutCall::call : PutCall::put;
    const BlackTerms terms{side, chain.terms.forward, strike, chain.terms.discount_factor};
    const double vol = std::exp(-5 + 7 * unit(random));
    double price = black_price(terms, vol * std::sqrt(chain.terms.year_fraction));
    if (i % 17 == 3) price = discounted_intrinsic(terms) - double(i % 2);
    if (i % 19 == 4) price = upper_bound(terms) * double(1 + i % 2);
    if (i % 23 == 5) price = std::numeric_limits<double>::quiet_NaN();
    if (i % 29 == 6) price = discounted_intrinsic(terms) + 1e-300;
    chain.strikes.push_back(i % 101 == 7 ? -1 : strike);
    chain.put_calls.push_back(side);
    chain.prices.push_back(price);
  }
  return chain;
}

struct Answer {
  std::vector<double> vols;
  std::vector<VolStatus> statuses;
};
Answer answer_of(const Chain& chain) {
  Answer out{std::vector<double>(chain.prices.size()), std::vector<VolStatus>(chain.prices.size())};
  implied_vols(chain.terms, chain.columns(), out.vols, out.statuses);
  return out;
}

class EveryTarget : public testing::Test {
 protected:
  void TearDown() override { use_batch_target(""); }
};

TEST_F(EveryTarget, GivesTheBitsOfTheScalarRoutineWhateverTheLength) {
  const auto targets = batch_targets();
  ASSERT_GE(targets.size(), 2u);
  for (const std::size_t count : {1u, 2u, 7u, 256u, 257u, 4001u}) {
    const Chain chain = mixed_chain(count);
    for (const auto& target : targets) {
      use_batch_target(target);
      const Answer answer = answer_of(chain);
      for (std::size_t i = 0; i < count; ++i) {
        const ImpliedVol alone = implied_vol({chain.put_calls[i], chain.terms.forward,
                                              chain.strikes[i], chain.terms.discount_factor},
                                             chain.prices[i], chain.terms.year_fraction);
        EXPECT_EQ(answer.statuses[i], alone.status) << target << ' ' << i;
        EXPECT_EQ(answer.vols[i], alone.vol) << target << ' ' << i;
      }
    }
  }
}

TEST_F(EveryTarget, GivesTheSameBitsInAnyCompany) {
  // The same element among others: what lanes beside it need must not touch it.
  const Chain chain = mixed_chain(997);
  Chain reversed = chain;
  std::reverse(reversed.strikes.begin(), reversed.strikes.end());
  std::reverse(reversed.prices.begin(), reversed.prices.end());
  std::reverse(reversed.put_calls.begin(), reversed.put_calls.end());
  for (const auto& target : batch_targets()) {
    use_batch_target(target);
    const Answer straight = answer_of(chain), back = answer_of(reversed);
    for (std::size_t i = 0; i < straight.vols.size(); ++i)
      EXPECT_EQ(straight.vols[i], back.vols[straight.vols.size() - 1 - i]) << target;
  }
}

// A squared 1/s used to overflow, and the answer shrank towards zero.
TEST(InvertNormalised, SmallestVolatilitiesAreFoundToo) {
  constexpr double kPromised = 4;
  for (const double s : {1e-100, 1e-160, 1e-250}) {
    const double x = -s;
    const double found = invert_normalised(x, normalised_price(x, s));
    // Condition at one deviation: under 3; the price itself is good to 8 ulp.
    EXPECT_NEAR(found / s, 1, (kPromised * 3 + 8) * kEps) << s;
  }
}

TEST(ImpliedVol, PriceBelowTheNormalDoublesIsIntrinsicValue) {
  for (const double price : {1e-310, 1e-320}) {
    const auto v = implied_vol({PutCall::call, 1, 1, 1}, price, 1);
    EXPECT_EQ(v.status, VolStatus::below_intrinsic);
    EXPECT_EQ(v.vol, 0);
  }
}

TEST(ImpliedVols, EveryElementHasAStatusAndNoNaNLeaves) {
  const Chain chain = mixed_chain(5000);
  const Answer answer = answer_of(chain);
  std::array<int, 4> seen{};
  for (std::size_t i = 0; i < answer.vols.size(); ++i) {
    ++seen[static_cast<std::size_t>(answer.statuses[i])];
    EXPECT_TRUE(std::isfinite(answer.vols[i]));
    EXPECT_EQ(answer.statuses[i] == VolStatus::ok, answer.vols[i] > 0);
  }
  for (const int count : seen) EXPECT_GT(count, 0);
}

TEST(ImpliedVols, TermsThatAreNoNumbersMakeAllNotFinite) {
  Chain chain = mixed_chain(20);
  for (const double bad : {0.0, -1.0, std::numeric_limits<double>::infinity(),
                           std::numeric_limits<double>::quiet_NaN()}) {
    chain.terms.forward = bad;
    for (const auto status : answer_of(chain).statuses) EXPECT_EQ(status, VolStatus::not_finite);
  }
}

// Doubles on either side of where the algorithm changes its form: the vol may waver by its own
// rounding, and not fall by more; 64 doubles on, where the price has truly grown, it has not
// fallen.
void walk_over(double x, double seam_price, const char* what) {
  constexpr int kSteps = 200, kApart = 64;
  constexpr double kPromised = 4;
  std::vector<double> prices(1, seam_price), xs, vols;
  for (int i = 0; i < kSteps; ++i) prices[0] = std::nextafter(prices[0], 0.0);
  for (int i = 0; i < 2 * kSteps; ++i) prices.push_back(std::nextafter(prices.back(), 1e9));
  xs.assign(prices.size(), x);
  vols.resize(prices.size());
  invert_normalised(xs, prices, vols);
  for (std::size_t i = 1; i < vols.size(); ++i) {
    const double s = vols[i], dln = prices[i] / (s * normalised_vega(x, s));
    // Of the condition 1 + |dln s/dln b| + |dln s/dln x| the last is at most 1 + the second here.
    EXPECT_GE(s, vols[i - 1] * (1 - 2 * kPromised * kEps * (2 + 2 * dln))) << what << ' ' << i;
    if (i >= kApart) {
      EXPECT_GE(s, vols[i - kApart]) << what << ' ' << i;
    }
  }
}

TEST(InvertNormalised, GrowsWithThePriceAcrossItsSeams) {
  // The series for t = s/2 and its lengths, |x| < 1, the upper half, and the two fits of the guess.
  for (const double x : {-1e-6, -0.01, -0.2, -0.9})
    for (const double s : {0.2, 0.6, 1.2}) walk_over(x, normalised_price(x, s), "series");
  for (const double s : {0.3, 0.8, 2.0}) {
    walk_over(-1.0, normalised_price(-1.0, s), "log-moneyness 1");
    walk_over(std::nextafter(-1.0, 0.0), normalised_price(-1.0, s), "log-moneyness 1");
  }
  for (const double x : {0.0, -0.1, -2.0, -30.0}) walk_over(x, 0.5 * std::exp(0.5 * x), "half");
  // r = |x| / (sqrt(2 pi) b) = 0.56
  for (const double x : {-1e-4, -0.05}) walk_over(x, -x / (2.5066282746310002 * 0.56), "guess");
}

}  // namespace
}  // namespace duskgrid::pricing
