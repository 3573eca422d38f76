#include "surface/surface.h"

#include <algorithm>
#include <cassert>
#include <cmath>

namespace duskgrid::surface {
namespace {

// First slice at or after t; end() past the last.
auto first_not_before(const Surface& surface, double t) {
  return std::lower_bound(surface.slices.begin(), surface.slices.end(), t,
                          [](const Slice& s, double v) { return s.year_fraction < v; });
}

double between(double a, double b, double weight) { return a + weight * (b - a); }

SliceParameters interpolate(const SliceParameters& a, const SliceParameters& b, double weight) {
  const double psi = between(a.psi, b.psi, weight);
  const double rho_psi = between(a.rho * a.psi, b.rho * b.psi, weight);
  // A flat pair has no correlation to speak of.
  const double rho = psi > 0 ? rho_psi / psi : between(a.rho, b.rho, weight);
  return {between(a.theta, b.theta, weight), rho, psi};
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

}  // namespace

TimedSmile smile_at_time(const Surface& surface, double t) {
  assert(!surface.slices.empty() && t > 0);
  const auto next = first_not_before(surface, t);
  if (next == surface.slices.end()) {
    const Slice& last = surface.slices.back();
    return {last.backbone, last.backbone.theta * (t / last.year_fraction - 1)};
  }
  if (next->year_fraction == t) return {next->backbone, 0};
  if (next == surface.slices.begin()) {
    const double weight = t / next->year_fraction;
    return {{weight * next->backbone.theta, next->backbone.rho, weight * next->backbone.psi}, 0};
  }
  const Slice& previous = *(next - 1);
  const double weight =
      (t - previous.year_fraction) / (next->year_fraction - previous.year_fraction);
  return {interpolate(previous.backbone, next->backbone, weight), 0};
}

SmilePoint point_at(const TimedSmile& smile, double k) {
  SmilePoint point = smile_at(smile.parameters, k);
  point.w += smile.shift;
  return point;
}

SmilePoint point_at(const Surface& surface, double k, double t) {
  return point_at(smile_at_time(surface, t), k);
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
