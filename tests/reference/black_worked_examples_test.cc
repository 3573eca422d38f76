// Textbook prices and volatilities, and tabulated values of the normal distribution and the error
// function. Books: J. Hull, "Options, Futures, and Other Derivatives", 10th ed. 2018; E. G. Haug,
// "The Complete Guide to Option Pricing Formulas", 2nd ed. 2007, chapter 1. Printed values are
// from memory of those pages (example numbers move between editions); the second number of each row
// is an independent recomputation of the closed form and the sharper check.
#include <gtest/gtest.h>

#include <cmath>
#include <limits>

#include "pricing/invert.h"

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kEps = std::numeric_limits<double>::epsilon();
// The recomputed numbers have six decimals.
constexpr double kRecomputed = 0.6e-6;

struct Priced {
  const char* source;
  PutCall put_call;
  double spot, strike, rate, carry_cost, vol, t;  // carry_cost b: F = S exp(b t)
  double printed, half_digit;                     // half of the last printed digit
  double recomputed;
};

BlackTerms terms_of(PutCall side, double spot, double strike, double rate, double b, double t) {
  return {side, spot * std::exp(b * t), strike, std::exp(-rate * t)};
}

// Hull's stock with cash dividends: 0.50 after 2 and 5 months, taken off the spot at 9 %.
double escrowed_spot() {
  return 40 - 0.5 * std::exp(-0.09 * 2 / 12) - 0.5 * std::exp(-0.09 * 5 / 12);
}

const Priced kPriced[] = {
    {"Hull ex. 15.6", PutCall::call, 42, 40, 0.10, 0.10, 0.20, 0.5, 4.76, 0.005, 4.759422},
    {"Hull ex. 15.6", PutCall::put, 42, 40, 0.10, 0.10, 0.20, 0.5, 0.81, 0.005, 0.808599},
    {"Hull ch. 15, cash dividends", PutCall::call, escrowed_spot(), 40, 0.09, 0.09, 0.30, 0.5, 3.67,
     0.005, 3.671233},
    {"Hull ch. 17, index", PutCall::call, 930, 900, 0.08, 0.05, 0.20, 2.0 / 12, 51.83, 0.005,
     51.832957},
    {"Hull ch. 18, futures", PutCall::put, 20, 20, 0.09, 0, 0.25, 4.0 / 12, 1.12, 0.005, 1.116641},
    {"Haug, Black-Scholes", PutCall::call, 60, 65, 0.08, 0.08, 0.30, 0.25, 2.1334, 0.00005,
     2.133368},
    {"Haug, Black-Scholes", PutCall::put, 60, 65, 0.08, 0.08, 0.30, 0.25, 5.8463, 0.00005,
     5.846282},
    {"Haug, Merton yield", PutCall::put, 100, 95, 0.10, 0.05, 0.20, 0.5, 2.4648, 0.00005, 2.464788},
    {"Haug, Black-76", PutCall::call, 19, 19, 0.10, 0, 0.28, 0.75, 1.7011, 0.00005, 1.701051},
    {"Haug, Black-76", PutCall::put, 19, 19, 0.10, 0, 0.28, 0.75, 1.7011, 0.00005, 1.701051},
    {"Haug, margined futures", PutCall::put, 4200, 3800, 0, 0, 0.15, 0.75, 65.6185, 0.00005,
     65.618542},
    {"Haug, currency", PutCall::call, 1.56, 1.6, 0.06, -0.02, 0.12, 0.5, 0.0291, 0.00005, 0.029099},
    {"Haug, generalised", PutCall::put, 75, 70, 0.10, 0.05, 0.35, 0.5, 4.0870, 0.00005, 4.086954},
};

TEST(WorkedPrices, EachAgreesToTheDigitsPrinted) {
  for (const Priced& p : kPriced) {
    const auto terms = terms_of(p.put_call, p.spot, p.strike, p.rate, p.carry_cost, p.t);
    const double price = black_price(terms, p.vol * std::sqrt(p.t));
    EXPECT_NEAR(price, p.printed, p.half_digit) << p.source;
    EXPECT_NEAR(price, p.recomputed, kRecomputed) << p.source;
  }
}

TEST(WorkedPrices, EachInvertsToTheVolatilityItWasMadeFrom) {
  for (const Priced& p : kPriced) {
    const auto terms = terms_of(p.put_call, p.spot, p.strike, p.rate, p.carry_cost, p.t);
    const double vega = black_greeks(terms, p.vol, p.t).vega;
    const auto v = implied_vol(terms, p.recomputed, p.t);
    ASSERT_EQ(v.status, VolStatus::ok) << p.source;
    EXPECT_NEAR(v.vol, p.vol, 1.1 * kRecomputed / vega) << p.source;  // a tenth for curvature
  }
}

// Hull sec. 15.11 prints 23.5 %, ch. 17 (currency, foreign rate 11 %) 14.1 %.
TEST(WorkedVolatilities, AgreeToTheDigitsPrinted) {
  constexpr double kPrinted = 0.0005, kDigits = 0.6e-6;  // of volatility
  const double stock =
      implied_vol(terms_of(PutCall::call, 21, 20, 0.10, 0.10, 0.25), 1.875, 0.25).vol;
  EXPECT_NEAR(stock, 0.235, kPrinted);
  EXPECT_NEAR(stock, 0.234513, kDigits);
  const double t = 4.0 / 12;
  const double currency =
      implied_vol(terms_of(PutCall::call, 1.6, 1.6, 0.08, -0.03, t), 0.043, t).vol;
  EXPECT_NEAR(currency, 0.141, kPrinted);
  EXPECT_NEAR(currency, 0.141119, kDigits);
}

// Hull ex. 15.6: d1 0.7693, d2 0.6278, N(d1) 0.7791, N(d2) 0.7349.
TEST(WorkedPrices, TheStepsOfTheTextbookExampleAgree) {
  constexpr double kFourDigits = 0.00005;
  const double s = 0.2 * std::sqrt(0.5);
  const double d1 = log_moneyness_of_forward(42 * std::exp(0.05), 40) / s + s / 2;
  EXPECT_NEAR(d1, 0.7693, kFourDigits);
  EXPECT_NEAR(d1 - s, 0.6278, kFourDigits);
  EXPECT_NEAR(normal_cdf(0.7693), 0.7791, kFourDigits);
  EXPECT_NEAR(normal_cdf(0.6278), 0.7349, kFourDigits);
  // The delta in the forward, over the discount factor, is N(d1).
  const auto greeks = black_greeks(terms_of(PutCall::call, 42, 40, 0.10, 0.10, 0.5), 0.2, 0.5);
  EXPECT_NEAR(greeks.delta / std::exp(-0.05), 0.7791, kFourDigits);
}

// Computed with 60 decimal digits; erfc(5) and erf(1) agree with Abramowitz & Stegun, table 7.1
// (from memory), the distribution with table 26.1.
struct Tabulated {
  double x, scaled_erfc, lower_tail, density;
};
constexpr Tabulated kTable[] = {
    {0.5, 0.6156903441929258748708, 0.3085375387259868963623, 0.3520653267642994777747},
    {1, 0.4275835761558070044108, 0.1586552539314570514148, 0.2419707245191433497978},
    {2, 0.2553956763105057438651, 0.02275013194817920720028, 0.05399096651318805195056},
    {3, 0.1790011511813899504193, 1.349898031630094526652e-3, 4.431848411938007175602e-3},
    {5, 0.1107046377330686263702, 2.866515718791939116738e-7, 1.486719514734297707908e-6},
    {10, 0.05614099274382258585752, 7.619853024160526065973e-24, 7.694598626706419346339e-23},
    {20, 0.02817434874105131931865, 2.753624118606233695076e-89, 5.520948362159763189583e-88},
};

TEST(NormalDistribution, TabulatedTailsAndDensitiesAgree) {
  for (const Tabulated& row : kTable) {
    // x / sqrt 2 is rounded, and the tail has a condition of x^2 in it: relative.
    const double rounding = (4 + row.x * row.x) * kEps;
    EXPECT_NEAR(normal_cdf(-row.x), row.lower_tail, rounding * row.lower_tail) << row.x;
    EXPECT_NEAR(normal_cdf(row.x), 1 - row.lower_tail, 4 * kEps) << row.x;
    EXPECT_NEAR(normal_pdf(row.x), row.density, rounding * row.density) << row.x;
  }
  EXPECT_NEAR(normal_cdf(-37), 5.725571222524576822683e-300, 1400 * kEps * 5.73e-300);
  EXPECT_NEAR(normal_pdf(37), 2.120006551524605626852e-298, 1400 * kEps * 2.12e-298);
}

TEST(NormalDistribution, TabulatedQuantilesAgree) {
  const double quantiles[][2] = {{0.75, 0.6744897501960817432022}, {0.9, 1.281551565544600466965},
                                 {0.95, 1.644853626951472714864},  {0.975, 1.959963984540054235525},
                                 {0.99, 2.326347874040841100886},  {0.995, 2.575829303548900760979},
                                 {0.999, 3.09023230616781354154}};
  for (const auto& [probability, x] : quantiles)
    EXPECT_NEAR(normal_cdf(x), probability, 4 * kEps) << probability;
  EXPECT_NEAR(normal_pdf(0), 0.3989422804014326779399, kEps);
}

TEST(ScaledErfc, TabulatedValuesAgree) {
  constexpr double kPromised = 4 * kEps;  // relative, pricing/black.h
  for (const Tabulated& row : kTable)
    EXPECT_NEAR(scaled_erfc(row.x), row.scaled_erfc, kPromised * row.scaled_erfc) << row.x;
  EXPECT_NEAR(scaled_erfc(26), 0.02168358485056290661617, kPromised * 0.0217);
}

}  // namespace
}  // namespace duskgrid::pricing
