#include "pricing/american_dividends.h"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <vector>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kPromise = 1e-4;  // 1e-6 of a spot of 100
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

Dividend cash(double time, double amount) { return {time, DividendKind::cash, amount}; }
Dividend share(double time, double amount) { return {time, DividendKind::proportional, amount}; }

double value(const AmericanTerms& terms, double vol, const std::vector<Dividend>& dividends,
             const DividendOptions& options = {}) {
  const auto p = price_with_dividends(terms, vol, dividends, options);
  EXPECT_EQ(p.status, AmericanStatus::ok);
  return p.price;
}

TEST(PriceWithDividends, EuropeanWithProportionalOnesIsBlackOnTheForward) {
  DividendOptions options;
  options.style = Style::european;
  for (const auto side : {PutCall::call, PutCall::put})
    for (const double strike : {80.0, 100.0, 120.0}) {
      const double forward = 100 * 0.98 * 0.97 * std::exp(0.04);
      const double exact = black_price({side, forward, strike, std::exp(-0.04)}, 0.3);
      EXPECT_NEAR(value({side, 100, strike, 0.04, 0, 1}, 0.3, {share(0.3, 0.02), share(0.8, 0.03)},
                        options),
                  exact, kPromise);
    }
}

TEST(PriceWithDividends, AreTheSameInAnyOrderAndIgnoredOutsideTheTime) {
  const AmericanTerms t{PutCall::call, 100, 95, 0.04, 0, 1};
  const double price = value(t, 0.25, {cash(0.2, 2), cash(0.7, 3)});
  EXPECT_EQ(price, value(t, 0.25, {cash(0.7, 3), cash(0.2, 2)}));
  EXPECT_EQ(price,
            value(t, 0.25, {cash(0.7, 3), cash(0, 9), cash(0.2, 2), cash(1, 9), cash(-1, 9)}));
}

// F. Black, Financial Analysts Journal 31 (1975) 36-41, 61-72: an American call is exercised, if at
// all, just before a dividend or at expiry.
TEST(PriceWithDividends, ACallIsWorthAtLeastEachTimeOfExercise) {
  const AmericanTerms t{PutCall::call, 100, 90, 0.03, 0, 1};
  const double price = value(t, 0.2, {cash(0.9, 8)});
  DividendOptions options;
  options.style = Style::european;
  const double held = value(t, 0.2, {cash(0.9, 8)}, options);
  AmericanTerms before = t;
  before.year_fraction = 0.9;
  const double taken = value(before, 0.2, {}, options);
  EXPECT_GT(price, held + 0.1);
  EXPECT_GT(price, taken);
}

TEST(PriceWithDividends, ADividendNextToNothingDoesNothing) {
  const AmericanTerms t{PutCall::put, 100, 105, 0.05, 0.01, 1};
  EXPECT_NEAR(value(t, 0.25, {cash(0.5, 1e-9)}), value(t, 0.25, {}), kPromise);
}

// With r < 0 and no dividend the put waits; a known dividend at once only moves the spot.
TEST(PriceWithDividends, ADividendAtOnceMovesTheSpot) {
  DividendOptions options;
  options.style = Style::european;
  const double time = 1e-9;
  const double moved = value({PutCall::call, 95, 100, 0.02, 0, 1}, 0.2, {}, options);
  EXPECT_NEAR(value({PutCall::call, 100, 100, 0.02, 0, 1}, 0.2, {cash(time, 5)}, options), moved,
              kPromise);
}

TEST(PriceWithDividends, ShortfallRulesDifferOnlyWhereTheSpotCanFallBelowTheDividend) {
  const AmericanTerms t{PutCall::put, 20, 20, 0.03, 0, 2};
  DividendOptions skips;
  skips.shortfall = Shortfall::survivor;
  const std::vector<Dividend> large{cash(1, 12)};
  // A spot that pays less than all it has is worth more, its put less.
  EXPECT_GT(value(t, 0.6, large), value(t, 0.6, large, skips) + 0.1);
  const AmericanTerms safe{PutCall::put, 100, 100, 0.03, 0, 0.5};
  EXPECT_NEAR(value(safe, 0.2, {cash(0.2, 2)}), value(safe, 0.2, {cash(0.2, 2)}, skips), kPromise);
}

TEST(PriceWithDividends, TwoBoundariesLieBetweenEuropeanAndBound) {
  const AmericanTerms t{PutCall::put, 90, 100, -0.01, -0.06, 1};
  DividendOptions european;
  european.style = Style::european;
  const double price = value(t, 0.1, {}), least = value(t, 0.1, {}, european);
  EXPECT_GT(price, least + 0.1);
  EXPECT_GE(price, 10);
  EXPECT_LT(price, american_ceiling(t));
}

TEST(PriceWithDividends, UnsoundArgumentsAreNotFinite) {
  const AmericanTerms good{PutCall::put, 100, 100, 0.05, 0.02, 1};
  const auto status = [&](const AmericanTerms& t, double vol, const std::vector<Dividend>& d) {
    return price_with_dividends(t, vol, d).status;
  };
  EXPECT_EQ(status(good, kNaN, {}), AmericanStatus::not_finite);
  EXPECT_EQ(status(good, 0, {}), AmericanStatus::not_finite);
  EXPECT_EQ(status(good, 0.2, {cash(0.5, kNaN)}), AmericanStatus::not_finite);
  EXPECT_EQ(status(good, 0.2, {cash(kNaN, 1)}), AmericanStatus::not_finite);
  EXPECT_EQ(status(good, 0.2, {cash(0.5, -1)}), AmericanStatus::not_finite);
  EXPECT_EQ(status(good, 0.2, {share(0.5, 1)}), AmericanStatus::not_finite);
  EXPECT_EQ(status({PutCall::put, kNaN, 100, 0.05, 0.02, 1}, 0.2, {}), AmericanStatus::not_finite);
  EXPECT_EQ(status({PutCall::put, 100, 100, 0.05, 0.02, 0}, 0.2, {}), AmericanStatus::not_finite);
}

}  // namespace
}  // namespace duskgrid::pricing
