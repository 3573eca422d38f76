#include "pricing/invert.h"

#include <array>
#include <boost/math/special_functions/erf.hpp>
#include <boost/math/tools/roots.hpp>
#include <cmath>
#include <limits>
#include <numbers>
#include <tuple>

namespace duskgrid::pricing {
namespace {

// A total volatility past which every price is its bound to the last bit.
constexpr double kLargestTotalVol = 120.0;
// Halley's step triples the correct digits: a third of the mantissa asked of it
// leaves the last step at rounding.
constexpr int kHalleyDigits = 20;
constexpr std::uintmax_t kMostSteps = 60;

// Second derivative of b over its first: x^2/s^3 - s/4.
double vega_slope(double x, double s) { return (x / s) * (x / s) / s - 0.25 * s; }

// ln(a/b) of positive numbers, without cancellation where they nearly agree and without overflow
// of the ratio where they do not.
double log_ratio(double a, double b) {
  const double difference = (a - b) / b;
  return std::abs(difference) < 0.5 ? std::log1p(difference) : std::log(a) - std::log(b);
}

// ln(b/beta) and two derivatives in s, s <= sqrt(-2x).
std::tuple<double, double, double> log_price(double x, double beta, double s) {
  constexpr double kInvSqrt2Pi = std::numbers::inv_sqrtpi / std::numbers::sqrt2;
  const double h = x / s;
  const double exponent = -0.5 * (h * h + 0.25 * s * s);
  const double scaled = scaled_price(x, s);
  const double first = kInvSqrt2Pi / scaled;
  const double b = std::exp(exponent) * scaled;
  // Near the root the ratio has more digits than the difference of logarithms.
  const double value = b < std::numeric_limits<double>::min()
                           ? exponent + std::log(scaled) - std::log(beta)
                           : log_ratio(b, beta);
  return {value, first, first * (vega_slope(x, s) - first)};
}

// b/beta - 1 and two derivatives in s.
std::tuple<double, double, double> price_ratio(double x, double beta, double s) {
  const double first = normalised_vega(x, s) / beta;
  return {(normalised_price(x, s) - beta) / beta, first, first * vega_slope(x, s)};
}

// -ln(gap/target) and two derivatives in s.
std::tuple<double, double, double> log_gap(double x, double target, double s) {
  const double gap = normalised_gap(x, s);
  if (gap < std::numeric_limits<double>::min())
    return {0.125 * s * s + std::log(target), 0.25 * s, 0.25};
  const double first = normalised_vega(x, s) / gap;
  return {-log_ratio(gap, target), first, first * (vega_slope(x, s) + first)};
}

// Below the root and of its order: the small-volatility limit ln b = -(x/s)^2 / 2 solved for s
// or, near the money, what the largest vega 1/sqrt(2 pi) would need.
double small_vol_guess(double x, double beta) {
  constexpr double kLeastInverseVega = 2.5066282746310005024;  // sqrt(2 pi)
  return std::max(-x / std::sqrt(2.0 * std::max(-std::log(beta) + 0.5 * x, 0.25)),
                  kLeastInverseVega * beta);
}

}  // namespace

std::string_view word(VolStatus status) {
  constexpr std::array<std::string_view, 4> kWords{"ok", "below intrinsic", "above bound",
                                                   "not finite"};
  return kWords[static_cast<std::size_t>(status)];
}

double invert_normalised(double x, double beta) {
  using boost::math::tools::halley_iterate;
  // At the money b = erf(s / sqrt 8).
  if (x == 0) return 2.0 * std::numbers::sqrt2 * boost::math::erf_inv(beta);
  std::uintmax_t steps = kMostSteps;
  // b bends at s = sqrt(2|x|). Below, its logarithm is close to a parabola; above it is
  // concave, and near its bound only the gap to the bound still has digits.
  const double bend = std::sqrt(-2.0 * x);
  const double at_bend = normalised_price(x, bend);
  if (beta <= at_bend) {
    const double guess = std::min(small_vol_guess(x, beta), bend);
    return halley_iterate([&](double s) { return log_price(x, beta, s); }, guess, 0.2 * guess, bend,
                          kHalleyDigits, steps);
  }
  const double bound = std::exp(0.5 * x);
  const double target = bound - beta;
  const double guess =
      std::min(bend + (beta - at_bend) / normalised_vega(x, bend), 0.5 * kLargestTotalVol);
  if (beta < 0.5 * bound)
    return halley_iterate([&](double s) { return price_ratio(x, beta, s); }, guess, bend,
                          kLargestTotalVol, kHalleyDigits, steps);
  return halley_iterate([&](double s) { return log_gap(x, target, s); }, guess, bend,
                        kLargestTotalVol, kHalleyDigits, steps);
}

ImpliedVol implied_vol(const BlackTerms& o, double price, double year_fraction) {
  const auto positive = [](double v) { return std::isfinite(v) && v > 0; };
  if (!positive(o.forward) || !positive(o.strike) || !positive(o.discount_factor) ||
      !positive(year_fraction) || !std::isfinite(price))
    return {VolStatus::not_finite, 0};
  const double time_value = price - discounted_intrinsic(o);
  if (time_value <= 0) return {VolStatus::below_intrinsic, 0};
  if (price >= upper_bound(o)) return {VolStatus::above_bound, 0};
  const double x = -std::abs(log_moneyness_of_forward(o.forward, o.strike));
  const double scale = o.discount_factor * std::sqrt(o.forward) * std::sqrt(o.strike);
  const double beta = time_value / scale;
  if (!positive(beta)) return {VolStatus::below_intrinsic, 0};
  if (beta >= std::exp(0.5 * x)) return {VolStatus::above_bound, 0};
  return {VolStatus::ok, invert_normalised(x, beta) / std::sqrt(year_fraction)};
}

}  // namespace duskgrid::pricing
