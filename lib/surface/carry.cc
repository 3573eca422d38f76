#include "surface/carry.h"

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>

namespace duskgrid::surface {
namespace {

bool positive(double v) { return std::isfinite(v) && v > 0; }

// Smile of a slice with every total variance times c.
void scale(Slice& slice, double c) {
  slice.backbone.theta *= c;
  slice.backbone.psi *= c;
  for (auto& coefficient : slice.overlay.coefficients) coefficient *= c;
}

// The backbone whose wings are those of total variance linear in time, a of the way.
SliceParameters between(const SliceParameters& x, const SliceParameters& y, double a) {
  const double psi = std::lerp(x.psi, y.psi, a);
  const double lean = std::lerp(x.rho * x.psi, y.rho * y.psi, a);
  return {std::lerp(x.theta, y.theta, a), psi > 0 ? lean / psi : std::lerp(x.rho, y.rho, a), psi};
}

// Knots on which splines of both slices live, and enough more for what two hyperbolas leave when a
// third is taken off: a quarter of a deviation apart near the money, ever wider outward.
std::vector<double> knots_for(const Slice& x, const Slice& y, double s0) {
  constexpr double kStep = 0.25, kEven = 2, kGrowth = 1.2, kReach = 20;
  std::vector<double> knots{0};
  for (double z = kStep, step = kStep; z < kReach; z += step) {
    if (z >= kEven) step *= kGrowth;
    knots.push_back(z * s0);
    knots.push_back(-z * s0);
  }
  for (const auto* own : {&x.overlay.knots, &y.overlay.knots})
    knots.insert(knots.end(), own->begin(), own->end());
  std::sort(knots.begin(), knots.end());
  // Knots all but on each other make the equations singular and add nothing.
  const double apart = 0.02 * s0;
  std::vector<double> kept{knots.front()};
  for (const double k : knots)
    if (k - kept.back() > apart) kept.push_back(k);
  return kept;
}

// Places between knots and a little beyond them.
std::vector<double> places_on(const std::vector<double>& knots) {
  constexpr int kPlaces = 4;
  std::vector<double> places;
  for (std::size_t i = 0; i + 1 < knots.size(); ++i)
    for (int j = 0; j < kPlaces; ++j)
      places.push_back(std::lerp(knots[i], knots[i + 1], static_cast<double>(j) / kPlaces));
  places.push_back(knots.back());
  return places;
}

// The spline nearest to what the backbone lacks, by least squares.
Overlay restated(const TimedSmile& smile, const SliceParameters& backbone,
                 std::vector<double> knots) {
  const auto places = places_on(knots);
  const auto rows = static_cast<Eigen::Index>(places.size());
  Eigen::MatrixXd basis = Eigen::MatrixXd::Zero(rows, static_cast<Eigen::Index>(knots.size()) - 2);
  Eigen::VectorXd wanted(rows);
  for (Eigen::Index i = 0; i < rows; ++i) {
    const double k = places[static_cast<std::size_t>(i)];
    const BasisPoint point = basis_at(knots, k);
    for (Eigen::Index j = 0; j < 4; ++j)
      basis(i, point.first + j) = point.value[static_cast<std::size_t>(j)];
    wanted(i) = smile.at(k).w - smile_at(backbone, k).w;
  }
  const Eigen::VectorXd x = basis.householderQr().solve(wanted);
  return {std::move(knots), {x.begin(), x.end()}};
}

// Whether the slice's smile is the old one at its time, as volatilities.
bool close(const Slice& slice, const TimedSmile& smile, double s0) {
  constexpr double kReach = 5;
  constexpr int kPlaces = 200;
  for (int i = 0; i <= kPlaces; ++i) {
    const double k = s0 * kReach * (2.0 * i / kPlaces - 1);
    const double own = std::sqrt(smile_of(slice, k).w / slice.year_fraction);
    const double old = std::sqrt(smile.at(k).w / slice.year_fraction);
    if (!(std::abs(own - old) <= kMostRestated)) return false;
  }
  return true;
}

// The old smile at the slice's remaining time, between its own expiry and the one before.
bool restate(Slice& slice, const Slice& before, const Slice& own, const Surface& old) {
  const double t = slice.year_fraction;
  const double a = (t - before.year_fraction) / (own.year_fraction - before.year_fraction);
  const TimedSmile smile(old, t);
  const double w = smile.at(0).w;
  if (!positive(w)) return false;
  slice.backbone = between(before.backbone, own.backbone, a);
  slice.overlay = restated(smile, slice.backbone, knots_for(before, own, std::sqrt(w)));
  return !slice.overlay.problem() && close(slice, smile, std::sqrt(w));
}

// The first old slice that is not before t.
std::size_t slice_at(const Surface& old, double t) {
  const auto found = std::lower_bound(old.slices.begin(), old.slices.end(), t,
                                      [](const Slice& s, double v) { return s.year_fraction < v; });
  return static_cast<std::size_t>(found - old.slices.begin());
}

std::optional<Slice> carried_slice(const Surface& old, const CarriedExpiry& expiry,
                                   CarryRule rule) {
  if (expiry.slice >= old.slices.size() || !positive(expiry.year_fraction) ||
      !positive(expiry.forward) || !positive(expiry.discount_factor))
    return std::nullopt;
  Slice slice = old.slices[expiry.slice];
  const double t = expiry.year_fraction;
  if (t > slice.year_fraction) return std::nullopt;
  // Whose smile it takes, wholly or in part.
  const std::size_t at = rule == CarryRule::own_expiry ? expiry.slice : slice_at(old, t);
  const Slice& source = old.slices[at];
  slice.backbone = source.backbone;
  slice.overlay = source.overlay;
  slice.year_fraction = t;
  slice.forward = expiry.forward;
  slice.discount_factor = expiry.discount_factor;
  if (t == source.year_fraction) return slice;
  if (rule == CarryRule::remaining_time && at > 0)
    return restate(slice, old.slices[at - 1], source, old) ? std::optional(slice) : std::nullopt;
  scale(slice, t / source.year_fraction);
  return slice;
}

}  // namespace

std::string_view word(CarryRule rule) {
  return rule == CarryRule::remaining_time ? "remaining time" : "own expiry";
}

std::optional<Surface> carry_surface(const Surface& old, std::span<const CarriedExpiry> expiries,
                                     CarryRule rule) {
  Surface carried{old.underlying, old.spot, {}};
  for (const auto& expiry : expiries) {
    auto slice = carried_slice(old, expiry, rule);
    if (!slice) return std::nullopt;
    if (!carried.slices.empty() && carried.slices.back().year_fraction >= slice->year_fraction)
      return std::nullopt;
    carried.slices.push_back(std::move(*slice));
  }
  if (carried.slices.empty()) return std::nullopt;
  return carried;
}

}  // namespace duskgrid::surface
