#include "surface/surface.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <limits>
#include <numbers>

#include "pricing/black.h"
#include "pricing/invert.h"

namespace duskgrid::surface {
namespace {

// First slice at or after t; end() past the last.
auto first_not_before(const Surface& surface, double t) {
  return std::lower_bound(surface.slices.begin(), surface.slices.end(), t,
                          [](const Slice& s, double v) { return s.year_fraction < v; });
}

// A point of a curve linear in t through (t0, y0) and (t1, y1).
double line(double t0, double y0, double t1, double y1, double t) {
  return y0 + (y1 - y0) * (t - t0) / (t1 - t0);
}

struct LogCurves {
  double t, forward, discount;
};

LogCurves logs_of(const Slice& s) {
  return {s.year_fraction, std::log(s.forward), std::log(s.discount_factor)};
}

// The two points whose line gives forward and discount at t.
std::pair<LogCurves, LogCurves> neighbours(const Surface& surface, double t) {
  const auto& slices = surface.slices;
  const LogCurves first = logs_of(slices.front());
  LogCurves origin{0, first.forward, 0};
  if (surface.spot) {
    origin.forward = std::log(*surface.spot);
  } else if (slices.size() > 1) {
    const LogCurves second = logs_of(slices[1]);
    origin.forward = line(first.t, first.forward, second.t, second.forward, 0);
  }
  if (slices.size() == 1) return {origin, first};
  const auto next = first_not_before(surface, t);
  if (next == slices.begin()) return {origin, first};
  if (next == slices.end()) return {logs_of(slices[slices.size() - 2]), logs_of(slices.back())};
  return {logs_of(*(next - 1)), logs_of(*next)};
}

constexpr double kSqrtHalfPi = 1.2533141373155002512;

// One end of a mixture of prices.
struct Side {
  double s, d1, slope, g;  // total vol, d1, ds/dk, Durrleman's function
  Side(const SmilePoint& p, double k)
      : s(std::sqrt(p.w)), d1(0.5 * s - k / s), slope(0.5 * p.dw_dk / s), g(durrleman(p, k)) {}
};

// n(from) / n(to).
double relative_density(double from, double to) {
  return std::exp(0.5 * (to - from) * (to + from));
}

struct Mixture {
  double s;               // total vol of the mixed price
  double rise_over_vega;  // later less earlier price, over vega at s
};

// Where prices are below the smallest double: the same by logarithms. ln b is all but linear in
// 1/s^2 there, and so is solved by Newton in that variable from the end that holds the price.
Mixture faint_mixture(double x, double first, double last, double weight) {
  const auto exponent = [&](double s) { return -0.5 * (x * x / (s * s) + 0.25 * s * s); };
  const auto log_price = [&](double s) {
    return std::log(pricing::scaled_price(x, s)) + exponent(s);
  };
  const double early = log_price(first), late = log_price(last), top = std::max(early, late);
  const double target =
      top + std::log((1 - weight) * std::exp(early - top) + weight * std::exp(late - top));
  constexpr int kMostSteps = 20;
  constexpr double kSettled = 1e-15;
  double s = weight == 1 || late > early ? last : first;
  for (int i = 0; i < kMostSteps && weight != 1; ++i) {
    const double price_over_vega = 2 * kSqrtHalfPi * pricing::scaled_price(x, s);
    const double step = 2 * (log_price(s) - target) * price_over_vega / s;  // of 1/s^2, relative
    s /= std::sqrt(1 + step);
    if (!(std::abs(step) > kSettled)) break;
  }
  const auto over_vega = [&](double side) {
    return 2 * kSqrtHalfPi * pricing::scaled_price(x, side) *
           std::exp(exponent(side) - exponent(s));
  };
  return {s, over_vega(last) - over_vega(first)};
}

// At x = -|k| <= 0 of total vols `first` and `last`.
Mixture mixture(double x, double first, double last, double weight) {
  const double early = pricing::normalised_price(x, first);
  const double late = pricing::normalised_price(x, last);
  const double price = early + weight * (late - early);
  if (x < 0 && !(price > std::numeric_limits<double>::min()))
    return faint_mixture(x, first, last, weight);
  const double s = weight == 1 ? last : pricing::invert_normalised(x, price);
  return {s, (late - early) / pricing::normalised_vega(x, s)};
}

}  // namespace

std::string_view word(Between rule) { return rule == Between::variance ? "variance" : "price"; }

SmilePoint smile_of(const Slice& slice, double k) {
  const SmilePoint w = smile_at(slice.backbone, k);
  if (slice.overlay.empty()) return w;
  const OverlayPoint u = overlay_at(slice.overlay, k);
  return {w.w + u.u, w.dw_dk + u.du_dk, w.d2w_dk2 + u.d2u_dk2};
}

TimedSmile::TimedSmile(const Surface& surface, double t) : t_(t) {
  assert(!surface.slices.empty() && t > 0);
  const auto next = first_not_before(surface, t);
  if (next == surface.slices.end()) {
    late_ = &surface.slices.back();
    past_ = true;
    growth_ = smile_of(*late_, 0).w / late_->year_fraction;
    shift_ = growth_ * (t - late_->year_fraction);
    return;
  }
  late_ = &*next;
  if (next == surface.slices.begin()) return;
  early_ = &*(next - 1);
  rule_ = early_->to_next;
  const double span = late_->year_fraction - early_->year_fraction;
  weight_ = (t - early_->year_fraction) / span;
  weight_slope_ = 1 / span;
  if (rule_ == Between::variance) return;
  // The undiscounted call at the money over the forward is erf(sqrt(w / 8)).
  const double first = smile_of(*early_, 0).w, last = smile_of(*late_, 0).w;
  const auto call = [](double w) { return std::erf(std::sqrt(w / 8)); };
  const double rise = call(last) - call(first);
  if (!(rise > 0)) return;
  const double w = std::lerp(first, last, weight_);
  const double slope = std::exp(-w / 8) / std::sqrt(8 * std::numbers::pi * w);  // of call(w)
  weight_ = std::clamp((call(w) - call(first)) / rise, 0.0, 1.0);
  weight_slope_ = slope * (last - first) / (span * rise);
}

SurfacePoint TimedSmile::at(double k) const {
  const SmilePoint b = smile_of(*late_, k);
  if (past_) return {b.w + shift_, b.dw_dk, b.d2w_dk2, growth_};
  if (!early_) {
    const double part = t_ / late_->year_fraction;
    return {part * b.w, part * b.dw_dk, part * b.d2w_dk2, b.w / late_->year_fraction};
  }
  const SmilePoint a = smile_of(*early_, k);
  if (rule_ == Between::price) return mixed(a, b, k);
  // At an expiry its own bits.
  const auto mix = [&](double x, double y) { return weight_ == 1 ? y : x + weight_ * (y - x); };
  return {mix(a.w, b.w), mix(a.dw_dk, b.dw_dk), mix(a.d2w_dk2, b.d2w_dk2),
          weight_slope_ * (b.w - a.w)};
}

std::vector<double> TimedSmile::breaks() const {
  std::vector<double> out;
  for (const Slice* slice : {early_, late_})
    if (slice) out.insert(out.end(), slice->overlay.knots.begin(), slice->overlay.knots.end());
  std::sort(out.begin(), out.end());
  out.erase(std::unique(out.begin(), out.end()), out.end());
  return out;
}

// Prices are undiscounted, over the forward, out of the money; n is the standard normal density,
// and every price and derivative is kept over n(d1) of the mixed smile, so that far wings keep
// their digits.
SurfacePoint TimedSmile::mixed(const SmilePoint& a, const SmilePoint& b, double k) const {
  // Where the earlier smile has no volatility there is no price to mix, and none either.
  if (weight_ < 1 && !(a.w > 0)) return {a.w, a.dw_dk, a.d2w_dk2, weight_slope_ * (b.w - a.w)};
  const Side first(a, k), last(b, k);
  const Mixture mix = mixture(-std::abs(k), first.s, last.s, weight_);
  const double s = mix.s;
  // No number to be had from such slices: the later smile is what is left.
  if (!(s > 0) || !std::isfinite(s) || !std::isfinite(mix.rise_over_vega))
    return {b.w, b.dw_dk, b.d2w_dk2, weight_slope_ * (b.w - a.w)};
  const double dw_dt = 2 * s * weight_slope_ * mix.rise_over_vega;
  if (weight_ == 1) return {b.w, b.dw_dk, b.d2w_dk2, dw_dt};
  const double d1 = 0.5 * s - k / s;
  // d price / dk = sign e^k N(-sign d2) + n(d1) ds/dk, with sign + for puts, which are k < 0.
  const double sign = k < 0 ? 1 : -1;
  const auto digital = [&](double d2) {  // e^k N(-sign d2) / n(d1), by e^k = n(d1) / n(d2)
    return kSqrtHalfPi * pricing::scaled_erfc(sign * d2 / std::numbers::sqrt2);
  };
  const double pa = (1 - weight_) * relative_density(first.d1, d1);
  const double pb = weight_ * relative_density(last.d1, d1);
  const double slope = pa * (sign * digital(first.d1 - first.s) + first.slope) +
                       pb * (sign * digital(last.d1 - last.s) + last.slope) -
                       sign * digital(d1 - s);
  const double g = s * (pa * first.g / first.s + pb * last.g / last.s);
  const double turn = 1 - k * slope / s;
  const double curvature = (g - turn * turn + 0.25 * s * s * slope * slope) / s;
  return {s * s, 2 * s * slope, 2 * (slope * slope + s * curvature), dw_dt};
}

SurfacePoint point_at(const Surface& surface, double k, double t) {
  return TimedSmile(surface, t).at(k);
}

double vol_at(const Surface& surface, double k, double t) {
  return std::sqrt(point_at(surface, k, t).w / t);
}

Carried carried_at(const Surface& surface, double t) {
  const auto next = first_not_before(surface, t);
  if (next != surface.slices.end() && next->year_fraction == t)
    return {next->forward, next->discount_factor};
  const auto [a, b] = neighbours(surface, t);
  return {std::exp(line(a.t, a.forward, b.t, b.forward, t)),
          std::exp(line(a.t, a.discount, b.t, b.discount, t))};
}

}  // namespace duskgrid::surface
