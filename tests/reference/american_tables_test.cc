// Published American option prices. Sources stand beside each table. The tables are from memory of
// the pages named, as are their printed digits; the six-decimal values are an independent
// recomputation (a boundary integral equation on 24 Chebyshev nodes, within 5e-9 of 40 nodes;
// finite differences agree to 1e-5) and the sharper check.
#include <gtest/gtest.h>

#include <cmath>

#include "pricing/american.h"
#include "pricing/american_batch.h"
#include "pricing/american_dividends.h"

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

constexpr double kRecomputed = 0.6e-6;  // the recomputed numbers have six decimals
const AmericanEngine kEngine;

double value(const AmericanTerms& terms, double vol) {
  const auto p = kEngine.price(terms, vol);
  EXPECT_EQ(p.status, AmericanStatus::ok);
  return p.price;
}

// M. Broadie, J. Detemple, Review of Financial Studies 9(4) (1996) 1211-1250, tables 1 and 2:
// calls, K 100, S 80 to 120. The printed "true" values have three decimals and agree with these
// to one unit of the third.
struct CallRow {
  double t, rate, vol, yield, calls[5];
};
const CallRow kCalls[] = {
    {0.5, 0.03, 0.2, 0.07, {0.219374, 1.386392, 4.782606, 11.097697, 20.000418}},
    {0.5, 0.03, 0.4, 0.07, {2.688781, 5.722068, 10.238666, 16.181141, 23.359709}},
    {0.5, 0.00, 0.3, 0.07, {1.037248, 3.123264, 7.035486, 12.955046, 20.717333}},
    {0.5, 0.07, 0.3, 0.03, {1.664381, 4.494676, 9.250635, 15.797504, 23.706204}},
    {3.0, 0.03, 0.2, 0.07, {2.579955, 5.166965, 9.066032, 14.443401, 21.413876}},
    {3.0, 0.03, 0.4, 0.07, {11.325683, 15.721972, 20.793330, 26.494431, 32.780987}},
    {3.0, 0.00, 0.3, 0.07, {5.517623, 8.841544, 13.142078, 18.453113, 24.790727}},
    {3.0, 0.07, 0.3, 0.03, {12.145208, 17.368319, 23.348408, 29.963503, 37.103345}},
};

TEST(AmericanTables, BroadieDetempleCallsAndTheirMirrorPuts) {
  for (const auto& row : kCalls)
    for (int i = 0; i < 5; ++i) {
      const double spot = 80 + 10 * i;
      EXPECT_NEAR(value({PutCall::call, spot, 100, row.rate, row.yield, row.t}, row.vol),
                  row.calls[i], kRecomputed);
      // McDonald & Schroder: C(S, K, r, q) = P(K, S, q, r).
      EXPECT_NEAR(value({PutCall::put, 100, spot, row.yield, row.rate, row.t}, row.vol),
                  row.calls[i], kRecomputed);
    }
}

// G. Barone-Adesi, R. Whaley, J. Finance 42 (1987) 301-320, and N. Ju, R. Zhong, J. Derivatives
// 7(2) (1999): puts, K 100, T 3, r 8 %, sigma 20 %, S 80 to 120.
struct PutRow {
  double yield, puts[5];
};
const PutRow kPuts[] = {
    {0.12, {25.657768, 20.083224, 15.498410, 11.803198, 8.885503}},
    {0.08, {22.204977, 16.207061, 11.703875, 8.367024, 5.929805}},
    {0.04, {20.350092, 13.496783, 8.943980, 5.911840, 3.897409}},
    {0.00, {20.000000, 11.697595, 6.932189, 4.155002, 2.510260}},
};

TEST(AmericanTables, JuZhongPuts) {
  for (const auto& row : kPuts)
    for (int i = 0; i < 5; ++i)
      EXPECT_NEAR(value({PutCall::put, 80.0 + 10 * i, 100, 0.08, row.yield, 3}, 0.2), row.puts[i],
                  kRecomputed);
}

// The same authors' table of b -4 %, r 8 %, sigma 20 %, T 0.25: the paper prints a quadratic
// approximation; these are exact values recomputed to three decimals.
TEST(AmericanTables, ExactValuesBesideTheQuadraticApproximation) {
  constexpr double kHalfDigit = 0.0005;
  const double calls[] = {0.029, 0.580, 3.525, 10.357, 20.000};
  const double puts[] = {20.414, 11.250, 4.396, 1.118, 0.184};
  for (int i = 0; i < 5; ++i) {
    const double spot = 80 + 10 * i;
    EXPECT_NEAR(value({PutCall::call, spot, 100, 0.08, 0.12, 0.25}, 0.2), calls[i], kHalfDigit);
    EXPECT_NEAR(value({PutCall::put, spot, 100, 0.08, 0.12, 0.25}, 0.2), puts[i], kHalfDigit);
  }
}

// R. Geske, H. Johnson, J. Finance 39 (1984): puts, S 40, r 4.88 %, no yield. The times are these
// decimals, not twelfths.
struct GeskeJohnsonRow {
  double vol, strike, puts[3];
};
const GeskeJohnsonRow kGeskeJohnson[] = {
    {0.2, 35, {0.006191, 0.200361, 0.432798}}, {0.2, 40, {0.852171, 1.579817, 1.990463}},
    {0.2, 45, {5.000000, 5.088325, 5.266987}}, {0.3, 35, {0.077386, 0.697497, 1.219811}},
    {0.3, 40, {1.309930, 2.482565, 3.169651}}, {0.3, 45, {5.059678, 5.705614, 6.243599}},
    {0.4, 35, {0.246556, 1.346032, 2.154882}}, {0.4, 40, {1.768136, 3.387469, 4.352708}},
    {0.4, 45, {5.286805, 6.509800, 7.382967}},
};

TEST(AmericanTables, GeskeJohnsonPuts) {
  const double times[] = {0.0833, 0.3333, 0.5833};
  for (const auto& row : kGeskeJohnson)
    for (int i = 0; i < 3; ++i)
      EXPECT_NEAR(value({PutCall::put, 40, row.strike, 0.0488, 0, times[i]}, row.vol), row.puts[i],
                  kRecomputed)
          << row.vol << ' ' << row.strike;
}

// L. Andersen, M. Lake, D. Offengenden, J. Comput. Finance 20(1) (2016), table 2: S = K = 100,
// T 1, r = q = 5 %, sigma 25 %, the early-exercise premium to all printed digits (verified in a
// transcription of the table).
TEST(AmericanTables, AndersenLakeOffengendenPremium) {
  constexpr double kPrinted = 0.106952702747, kLastDigits = 5e-12;  // our own ends ...749
  const auto p = kEngine.price({PutCall::put, 100, 100, 0.05, 0.05, 1}, 0.25);
  EXPECT_NEAR(p.price - p.european, kPrinted, kLastDigits);
  EXPECT_NEAR(p.european, 9.4624925962, 0.5e-10);
}

// F. Longstaff, E. Schwartz, Review of Financial Studies 14(1) (2001) 113-147, table 1: puts, K
// 40, r 6 %. The numbers printed there are of options exercisable 50 times a year and lie up to
// 0.009 below these, which are American.
struct LongstaffSchwartzRow {
  double spot, vol, one_year, printed_one, two_years, printed_two;
};
const LongstaffSchwartzRow kLongstaffSchwartz[] = {
    {36, 0.2, 4.486674, 4.478, 4.848304, 4.840}, {36, 0.4, 7.108980, 7.101, 8.514185, 8.508},
    {38, 0.2, 3.257196, 3.250, 3.751381, 3.745}, {38, 0.4, 6.154590, 6.148, 7.674906, 7.670},
    {40, 0.2, 2.319574, 2.314, 2.889951, 2.885}, {40, 0.4, 5.318294, 5.312, 6.923458, 6.920},
    {42, 0.2, 1.621155, 1.617, 2.216724, 2.212}, {42, 0.4, 4.588160, 4.582, 6.250236, 6.248},
    {44, 0.2, 1.112962, 1.110, 1.693330, 1.690}, {44, 0.4, 3.952785, 3.948, 5.646731, 5.647},
};

TEST(AmericanTables, LongstaffSchwartzPuts) {
  constexpr double kBermudan = 0.010;  // what 50 dates a year are worth less, and its printed error
  for (const auto& row : kLongstaffSchwartz) {
    const double one = value({PutCall::put, row.spot, 40, 0.06, 0, 1}, row.vol);
    const double two = value({PutCall::put, row.spot, 40, 0.06, 0, 2}, row.vol);
    EXPECT_NEAR(one, row.one_year, kRecomputed) << row.spot << ' ' << row.vol;
    EXPECT_NEAR(two, row.two_years, kRecomputed) << row.spot << ' ' << row.vol;
    EXPECT_NEAR(one, row.printed_one, kBermudan);
    EXPECT_NEAR(two, row.printed_two, kBermudan);
  }
}

// The other two routes to the same numbers.
TEST(AmericanTables, FiniteDifferencesAgreeWithTheTables) {
  constexpr double kPromise = 1e-6;  // of the spot, american_dividends.h
  for (const auto& row : kCalls) {
    const AmericanTerms terms{PutCall::call, 100, 100, row.rate, row.yield, row.t};
    EXPECT_NEAR(price_with_dividends(terms, row.vol, {}).price, row.calls[2], 100 * kPromise);
  }
}

TEST(AmericanTables, TablesOfPremiumsInvertToTheVolatilitiesPrinted) {
  const AmericanInverter inverter;
  for (const auto& row : kCalls)
    for (int i = 0; i < 5; ++i) {
      const double spot = 80 + 10 * i, strike = 100;
      const auto side = PutCall::call;
      double vol = 0, european = 0;
      AmericanVolStatus status{};
      inverter.invert({spot, row.rate, row.yield, row.t},
                      {{&strike, 1}, {&side, 1}, {&row.calls[i], 1}},
                      {{&vol, 1}, {&european, 1}, {&status, 1}});
      ASSERT_EQ(status, AmericanVolStatus::ok);
      const AmericanTerms terms{side, spot, strike, row.rate, row.yield, row.t};
      const double vega = (value(terms, row.vol + 1e-4) - value(terms, row.vol)) / 1e-4;
      // The batch's promise, the digits of the table, a tenth for curvature.
      EXPECT_NEAR(vol, row.vol, 1.1 * (1e-6 * spot + kRecomputed) / vega) << spot;
    }
}

// E. G. Haug, J. Haug, A. Lewis, Wilmott (Sep. 2003) 37-51 (from memory): a European call with one
// cash dividend is the expectation, over the spot at the ex-dividend time, of the Black price of
// what is left of the spot then.
TEST(DividendTables, EuropeanCallWithOneCashDividendIsTheIntegralOverTheSpotAtItsTime) {
  constexpr double kSpot = 100, kRate = 0.06, kVol = 0.3, kAt = 0.5, kAmount = 7;
  constexpr int kPoints = 20000;
  constexpr double kReach = 9;
  double sum = 0;
  for (int i = 0; i <= kPoints; ++i) {  // the trapezoidal rule is exact to rounding for such
    const double z = kReach * (2.0 * i / kPoints - 1);
    const double spot =
        kSpot * std::exp((kRate - 0.5 * kVol * kVol) * kAt + kVol * std::sqrt(kAt) * z);
    const double left = spot - kAmount;
    if (left <= 0) continue;
    sum += normal_pdf(z) *
           black_price({PutCall::call, left * std::exp(kRate * 0.5), 100, std::exp(-kRate * 0.5)},
                       kVol * std::sqrt(0.5));
  }
  const double exact = std::exp(-kRate * kAt) * sum * 2 * kReach / kPoints;
  const Dividend dividend{kAt, DividendKind::cash, kAmount};
  DividendOptions options;
  options.style = Style::european;
  const auto p =
      price_with_dividends({PutCall::call, kSpot, 100, kRate, 0, 1}, kVol, {&dividend, 1}, options);
  EXPECT_NEAR(p.price, exact, 1e-6 * kSpot);
}

}  // namespace
}  // namespace duskgrid::pricing
