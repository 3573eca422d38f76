#include "surface/derived.h"

#include <algorithm>
#include <boost/math/quadrature/gauss_kronrod.hpp>
#include <cmath>
#include <vector>

namespace duskgrid::surface {
namespace {

using quotes::PutCall;

bool positive(double v) { return std::isfinite(v) && v > 0; }

std::optional<double> finite(double v) {
  return std::isfinite(v) ? std::optional(v) : std::nullopt;
}

double durrleman_of(const SurfacePoint& p, double k) {
  return durrleman({p.w, p.dw_dk, p.d2w_dk2}, k);
}

double d2_of(double w, double k) {
  const double s = std::sqrt(w);
  return -k / s - 0.5 * s;
}

// w n(d2) times the rate at which d2 falls in k.
double swap_integrand(const SurfacePoint& p, double k) {
  const double s = std::sqrt(p.w), slope = 0.5 * p.dw_dk / s;
  const double fall = (1 - k * slope / s) / s + 0.5 * slope;
  return p.w * pricing::normal_pdf(-k / s - 0.5 * s) * fall;
}

struct Integral {
  double value = 0, error = 0;
};

// Of f from a to b. Boost halves by an error that it takes on [-1, 1], hence the map.
template <class F>
Integral piece(const F& f, double a, double b) {
  constexpr double kEachPiece = 1e-12;  // relative
  constexpr unsigned kMostHalvings = 8;
  const double middle = 0.5 * (a + b), half = 0.5 * (b - a);
  Integral out;
  out.value = boost::math::quadrature::gauss_kronrod<double, 31>::integrate(
      [&](double y) { return half * f(middle + half * y); }, -1.0, 1.0, kMostHalvings, kEachPiece,
      &out.error);
  return out;
}

// From k = 0 outward on one side (+1 or -1), in pieces that end at a break or at a doubling of the
// distance. Nothing when the weight does not die out.
std::optional<Integral> swap_integral(const TimedSmile& smile, double side) {
  constexpr double kFar = 12;  // of d2: the weight there is below 1e-31
  constexpr int kMostDoublings = 64;
  const auto integrand = [&](double x) { return swap_integrand(smile.at(side * x), side * x); };
  std::vector<double> breaks;
  for (const double k : smile.breaks())
    if (side * k > 0) breaks.push_back(side * k);
  std::sort(breaks.begin(), breaks.end());
  Integral sum;
  auto next = breaks.begin();
  double from = 0, reach = std::sqrt(smile.at(0).w);
  for (int doublings = 0; doublings < kMostDoublings;) {
    double to = reach;
    if (next != breaks.end() && *next <= reach) {
      to = *next++;
    } else {
      reach *= 2;
      ++doublings;
    }
    if (to > from) {
      const Integral part = piece(integrand, from, to);
      sum.value += part.value;
      sum.error += part.error;
    }
    from = to;
    if (!std::isfinite(sum.value)) return std::nullopt;
    if (-side * d2_of(smile.at(side * from).w, side * from) > kFar) return sum;
  }
  return std::nullopt;
}

}  // namespace

std::optional<double> log_density(const SurfacePoint& point, double k) {
  if (!positive(point.w)) return std::nullopt;
  return finite(durrleman_of(point, k) * pricing::normal_pdf(d2_of(point.w, k)) /
                std::sqrt(point.w));
}

std::optional<double> local_variance(const SurfacePoint& point, double k) {
  constexpr double kRounding = 1e-12;  // of g, whose terms are of order 1
  if (!positive(point.w) || !(point.dw_dt >= 0)) return std::nullopt;
  const double g = durrleman_of(point, k);
  if (!(g > kRounding)) return std::nullopt;
  return finite(point.dw_dt / g);
}

std::optional<Derived> derived_at(const TimedSmile& smile, const Carried& carried, double k,
                                  std::optional<PutCall> put_call) {
  const SurfacePoint point = smile.at(k);
  const double t = smile.year_fraction();
  Derived out{};
  out.strike = k == 0 ? carried.forward : carried.forward * std::exp(k);
  out.vol = std::sqrt(point.w / t);
  out.put_call = put_call.value_or(k < 0 ? PutCall::put : PutCall::call);
  if (!positive(out.strike) || !positive(out.vol) || !positive(carried.discount_factor))
    return std::nullopt;
  const pricing::BlackTerms terms{out.put_call, carried.forward, out.strike,
                                  carried.discount_factor};
  out.price = pricing::black_price(terms, std::sqrt(point.w));
  out.greeks = pricing::black_greeks(terms, out.vol, t);
  if (const auto density = log_density(point, k)) out.density = finite(*density / out.strike);
  if (const auto variance = local_variance(point, k)) out.local_vol = std::sqrt(*variance);
  return out;
}

std::optional<VarianceSwap> variance_swap(const TimedSmile& smile) {
  constexpr double kAccuracy = 1e-10;  // relative
  const auto puts = swap_integral(smile, -1);
  const auto calls = swap_integral(smile, 1);
  if (!puts || !calls) return std::nullopt;
  const double sum = puts->value + calls->value;
  const double variance = sum / smile.year_fraction();
  if (!positive(variance) || !(puts->error + calls->error < kAccuracy * sum)) return std::nullopt;
  return VarianceSwap{variance, std::sqrt(variance)};
}

}  // namespace duskgrid::surface
