#include "pricing/black.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <numbers>

namespace duskgrid::pricing {
namespace {

using std::numbers::inv_sqrtpi;
using std::numbers::sqrt2;

constexpr double kInvSqrt2 = 1.0 / sqrt2;
constexpr double kInvSqrt2Pi = inv_sqrtpi * kInvSqrt2;
constexpr double kSqrtHalfPi = 1.2533141373155002512;  // sqrt(pi / 2)

// Where the difference of scaled erfc's gives way to its series in s/2. With |x| < 1
// and s/2 < 0.6 the first term left out is below 1e-17 of the sum; outside, the difference loses
// no more than a factor max(2, |x|/s^2) <= max(2, (x/s)^2).
constexpr double kSeriesHalfVol = 0.6;
constexpr double kSeriesLogMoneyness = 1.0;

// erf on [0, 0.46875] as x P(x^2)/Q(x^2).
double erf_near_zero(double x) {
  constexpr std::array<double, 5> kP{3.16112374387056560e00, 1.13864154151050156e02,
                                     3.77485237685302021e02, 3.20937758913846947e03,
                                     1.85777706184603153e-1};
  constexpr std::array<double, 4> kQ{2.36012909523441209e01, 2.44024637934444173e02,
                                     1.28261652607737228e03, 2.84423683343917062e03};
  const double z = x * x;
  double p = kP[4] * z;
  double q = z;
  for (std::size_t i = 0; i < 3; ++i) {
    p = (p + kP[i]) * z;
    q = (q + kQ[i]) * z;
  }
  return x * (p + kP[3]) / (q + kQ[3]);
}

// exp(x^2) erfc(x) on [0.46875, 4].
double scaled_erfc_middle(double x) {
  constexpr std::array<double, 9> kP{
      5.64188496988670089e-1, 8.88314979438837594e00, 6.61191906371416295e01,
      2.98635138197400131e02, 8.81952221241769090e02, 1.71204761263407058e03,
      2.05107837782607147e03, 1.23033935479799725e03, 2.15311535474403846e-8};
  constexpr std::array<double, 8> kQ{1.57449261107098347e01, 1.17693950891312499e02,
                                     5.37181101862009858e02, 1.62138957456669019e03,
                                     3.29079923573345963e03, 4.36261909014324716e03,
                                     3.43936767414372164e03, 1.23033935480374942e03};
  double p = kP[8] * x;
  double q = x;
  for (std::size_t i = 0; i < 7; ++i) {
    p = (p + kP[i]) * x;
    q = (q + kQ[i]) * x;
  }
  return (p + kP[7]) / (q + kQ[7]);
}

// exp(x^2) erfc(x) above 4.
double scaled_erfc_tail(double x) {
  constexpr std::array<double, 6> kP{3.05326634961232344e-1, 3.60344899949804439e-1,
                                     1.25781726111229246e-1, 1.60837851487422766e-2,
                                     6.58749161529837803e-4, 1.63153871373020978e-2};
  constexpr std::array<double, 5> kQ{2.56852019228982242e00, 1.87295284992346725e00,
                                     5.27905102951428412e-1, 6.05183413124413191e-2,
                                     2.33520497626869185e-3};
  const double z = 1.0 / (x * x);
  double p = kP[5] * z;
  double q = z;
  for (std::size_t i = 0; i < 4; ++i) {
    p = (p + kP[i]) * z;
    q = (q + kQ[i]) * z;
  }
  return (inv_sqrtpi - z * (p + kP[4]) / (q + kQ[4])) / x;
}

// Y(h+t) - Y(h-t) for Y = N/n (n the density), by its odd Taylor terms in t: Y' = 1 + h Y
// and Y^(m+1) = h Y^(m) + m Y^(m-1).
double mills_difference_series(double h, double t) {
  constexpr int kLastOrder = 23;
  double previous = kSqrtHalfPi * scaled_erfc(-h * kInvSqrt2);  // Y
  double current = 1.0 + h * previous;                          // Y'
  double weight = t;                                            // t^m / m!
  double sum = weight * current;
  for (int m = 1; m < kLastOrder; ++m) {
    const double next = h * current + m * previous;
    previous = current;
    current = next;
    weight *= t / (m + 1);
    if (m % 2 == 0) sum += weight * current;
  }
  return 2.0 * sum;
}

}  // namespace

double scaled_erfc(double x) {
  const double magnitude = std::abs(x);
  if (magnitude <= 0.46875) return std::exp(x * x) * (1.0 - erf_near_zero(x));
  const double positive =
      magnitude <= 4.0 ? scaled_erfc_middle(magnitude) : scaled_erfc_tail(magnitude);
  return x > 0 ? positive : 2.0 * std::exp(x * x) - positive;
}

double normal_cdf(double x) { return 0.5 * std::erfc(-x * kInvSqrt2); }

double normal_pdf(double x) { return kInvSqrt2Pi * std::exp(-0.5 * x * x); }

double log_moneyness_of_forward(double forward, double strike) {
  const double ratio = forward / strike;
  return std::abs(ratio - 1.0) < 0.5 ? std::log1p((forward - strike) / strike)
                                     : std::log(forward) - std::log(strike);
}

double scaled_price(double x, double s) {
  const double h = x / s;
  const double t = 0.5 * s;
  if (t < kSeriesHalfVol && x > -kSeriesLogMoneyness)
    return kInvSqrt2Pi * mills_difference_series(h, t);
  return 0.5 * (scaled_erfc(-(h + t) * kInvSqrt2) - scaled_erfc(-(h - t) * kInvSqrt2));
}

double normalised_price(double x, double s) {
  if (s <= 0) return 0;
  const double h = x / s;
  const double t = 0.5 * s;
  const double gauss = std::exp(-0.5 * (h * h + t * t));
  if (h + t <= 0 || (t < kSeriesHalfVol && x > -kSeriesLogMoneyness))
    return gauss * scaled_price(x, s);
  // Past d1 = 0 the scaled form of the first term would multiply an overflow by an underflow.
  return 0.5 * (std::exp(0.5 * x) * std::erfc(-(h + t) * kInvSqrt2) -
                gauss * scaled_erfc(-(h - t) * kInvSqrt2));
}

double normalised_gap(double x, double s) {
  if (s <= 0) return std::exp(0.5 * x);
  const double h = x / s;
  const double t = 0.5 * s;
  // The scaled form of the second term: plain, erfc underflows while e^{-x/2} is large.
  return 0.5 * (std::exp(0.5 * x) * std::erfc((h + t) * kInvSqrt2) +
                std::exp(-0.5 * (h * h + t * t)) * scaled_erfc(-(h - t) * kInvSqrt2));
}

double normalised_vega(double x, double s) {
  const double h = x / s;
  return kInvSqrt2Pi * std::exp(-0.5 * (h * h + 0.25 * s * s));
}

double discounted_intrinsic(const BlackTerms& o) {
  const double call = o.forward - o.strike;
  return o.discount_factor * std::max(0.0, o.put_call == quotes::PutCall::call ? call : -call);
}

double upper_bound(const BlackTerms& o) {
  return o.discount_factor * (o.put_call == quotes::PutCall::call ? o.forward : o.strike);
}

double black_price(const BlackTerms& o, double total_vol) {
  const double x = log_moneyness_of_forward(o.forward, o.strike);
  const double scale = o.discount_factor * std::sqrt(o.forward) * std::sqrt(o.strike);
  return discounted_intrinsic(o) + scale * normalised_price(-std::abs(x), total_vol);
}

Greeks black_greeks(const BlackTerms& o, double vol, double year_fraction) {
  const double root_t = std::sqrt(year_fraction);
  const double s = vol * root_t;
  const double d1 = log_moneyness_of_forward(o.forward, o.strike) / s + 0.5 * s;
  const double sign = o.put_call == quotes::PutCall::call ? 1.0 : -1.0;
  const double density = normal_pdf(d1);
  return {.delta = sign * o.discount_factor * normal_cdf(sign * d1),
          .gamma = o.discount_factor * density / (o.forward * s),
          .vega = o.discount_factor * o.forward * density * root_t};
}

}  // namespace duskgrid::pricing
