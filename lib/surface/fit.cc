#include "surface/fit.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <optional>

#include "surface/quadratic_program.h"
#include "surface/slice_model.h"

namespace duskgrid::surface {
namespace {

using Blocks = std::vector<Eigen::VectorXd>;

// Least values asked for where a condition is watched; half of them is enough to pass, and leaves
// the certificate room. Of g; of total variance over the money's; of its step between expiries over
// that of the backbones, which keeps local volatility from vanishing.
constexpr double kLeastButterfly = 0.03;
constexpr double kLeastVariance = 0.05;
constexpr double kLeastStep = 0.05;
constexpr double kPasses = 0.5;
// Price of leaving a spread, by half-spreads: dearer than any pull to a mid inside one. Breaking a
// condition costs so many times what all spreads of the slice together could gain by it.
constexpr double kSpreadPenalty = 20;
constexpr double kConditionPenalty = 100;
// Quotes are asked to be inside by this share of the spread, so that rounding leaves them so.
constexpr double kInside = 0.98;
constexpr int kMostHumps = 2;

// One place on a slice, and which conditions are watched there.
struct Place {
  Probe probe;
  unsigned watched = 0;  // a bit a condition
};

// One place where two neighbouring slices are compared.
struct Crossing {
  Probe first, second;
  double floor;  // least step of total variance
  bool watched = false;
};

double k_of(const Place& p) { return p.probe.k; }
double k_of(const Crossing& c) { return c.first.k; }

// Backbones whose wings go on at the slopes with which the quotes end, up to a factor of those of
// the shapes, under conditions B1, B2, C1 and C2 of docs/methods.md, strictly. theta grows as these
// ask; near the money the overlay makes up for it.
std::vector<SliceParameters> wings_of(const std::vector<SliceParameters>& shapes,
                                      const std::vector<SliceModel>& models) {
  constexpr double kReach = 2;
  constexpr double kSteepest = 3.8;  // of psi (1 +- rho), below 4
  constexpr double kShallowest = 1e-3;
  constexpr double kStrictly = 1 + 1e-6, kApart = 1 + 2e-5;
  constexpr double kDeepest = 0.8, kLargest = 4;
  constexpr double kShrink = 0.9, kLeastPart = 0.2;
  std::vector<SliceParameters> out;
  double down = 0, up = 0;
  for (std::size_t j = 0; j < models.size(); ++j) {
    const SliceParameters& shape = shapes[j];
    const auto ends = models[j].end_slopes();
    const auto slope = [&](double own, double end, double before) {
      const double wanted = std::clamp(2 * end, own / kReach, own * kReach);
      return std::max(std::clamp(wanted, kShallowest * models[j].s0(), kSteepest),
                      before * kStrictly);
    };
    const double least_down = down * kStrictly, least_up = up * kStrictly;
    down = slope(shape.psi * (1 - shape.rho), -ends[0], down);
    up = slope(shape.psi * (1 + shape.rho), ends[1], up);
    // Brought down to the money again, a hyperbola of too large a theta would not stay above 0.
    const double rho = (up - down) / (up + down);
    const double most = shape.theta * std::clamp(kDeepest / (rho * rho), 1.0, kLargest);
    const auto theta_for = [&](double part) {
      const double d = std::max(least_down, part * down), u = std::max(least_up, part * up);
      const double psi = 0.5 * (d + u);
      const double by_curvature = 0.25 * psi * std::max(d, u) * kStrictly;
      const double by_before = j > 0 ? out[j - 1].theta * psi / out[j - 1].psi * kApart : 0;
      return std::max(by_curvature, by_before);
    };
    double part = 1;
    while (part > kLeastPart && theta_for(part) > most) part *= kShrink;
    const double theta = std::max(shape.theta, theta_for(part));
    down = std::max(least_down, part * down);
    up = std::max(least_up, part * up);
    out.push_back({theta, (up - down) / (up + down), 0.5 * (down + up)});
  }
  return out;
}

class OverlayFit {
 public:
  OverlayFit(std::vector<SliceModel> models, int most_rounds)
      : models_(std::move(models)), most_rounds_(most_rounds) {
    for (const auto& m : models_) {
      double gain = 1;
      for (const QuoteRow& q : m.quotes()) gain += kSpreadPenalty * q.scale;
      penalties_.push_back(kConditionPenalty * gain);
      x_.push_back(m.smooth());
      places_.emplace_back();
      for (const double k : m.places()) places_.back().push_back({m.probe_at(k)});
    }
    for (std::size_t j = 0; j + 1 < models_.size(); ++j) {
      auto ks = models_[j].places();
      const auto more = models_[j + 1].places();
      ks.insert(ks.end(), more.begin(), more.end());
      std::sort(ks.begin(), ks.end());
      // Twins would hide a low point from look_closer().
      const double apart = 1e-4 * models_[j].s0();
      ks.erase(std::unique(ks.begin(), ks.end(),
                           [&](double k, double next) { return next - k < apart; }),
               ks.end());
      add_far_places(ks);
      crossings_.emplace_back();
      for (const double k : ks) crossings_.back().push_back(crossing_at(j, k));
    }
  }

  // From the smooth overlays, which may break conditions. Whether all are met in the end, wherever
  // they were looked for.
  bool from_smooth() {
    if (!settle()) return false;
    constexpr int kSmoothings = 5;
    for (int i = 0; i < kSmoothings && smoother(); ++i) {
    }
    return true;
  }

  // From no overlay, where every condition is met, by steps that keep it so.
  void from_backbone() {
    constexpr double kShortest = 1e-3, kSmall = 0.01;
    // What the way to the smooth overlays would break is watched from the start.
    for (int halvings = 0; halvings < 4; ++halvings) {
      watch();
      for (auto& x : x_) x *= 0.5;
    }
    for (auto& x : x_) x.setZero();
    for (int round = 0; round < 3 * most_rounds_; ++round) {
      const Blocks before = x_;
      const Blocks target = solve_quadratic(program(), before).x;
      const std::size_t known = rows_watched_;
      double step = 1;
      for (; step > kShortest; step *= 0.5) {
        for (std::size_t j = 0; j < x_.size(); ++j)
          x_[j] = before[j] + step * (target[j] - before[j]);
        if (!watch() && !look_closer()) break;
      }
      const bool stuck = step <= kShortest;
      if (stuck) x_ = before;
      if ((stuck && rows_watched_ == known) || (step == 1 && change_from(before) < kSmall)) return;
    }
  }

  Overlay overlay(std::size_t slice) const { return models_[slice].overlay(x_[slice]); }

  // Local maxima of the density.
  int humps(std::size_t j) const {
    int count = 0;
    double before = 0;
    bool rising = true;
    for (const Place& p : places_[j]) {
      const double density = models_[j].density(p.probe, x_[j]);
      if (rising && density < before) ++count;
      rising = density > before || (rising && density == before);
      before = density;
    }
    return count;
  }

  // Quotes outside their spreads, and by how many half-spreads together; strays aside.
  std::size_t outside() const {
    std::size_t n = 0;
    for (std::size_t j = 0; j < models_.size(); ++j) n += models_[j].outside(x_[j]);
    return n;
  }

  double missed() const {
    double sum = 0;
    for (std::size_t j = 0; j < models_.size(); ++j)
      for (const QuoteRow& q : models_[j].quotes()) {
        const double r = models_[j].misfit(q, x_[j]);
        if (!q.stray) sum += std::max({0.0, r - q.high, q.low - r});
      }
    return sum;
  }

 private:
  // Wings of all but equal slopes cross far out, if at all.
  static void add_far_places(std::vector<double>& ks) {
    constexpr int kFurther = 10;
    constexpr double kRatio = 4;
    const double left = ks.front(), right = ks.back();
    double span = right - left;
    for (int i = 0; i < kFurther; ++i) {
      span *= kRatio;
      ks.insert(ks.begin(), left - span);
      ks.push_back(right + span);
    }
  }

  Crossing crossing_at(std::size_t j, double k) const {
    const SliceModel &a = models_[j], &b = models_[j + 1];
    Crossing c{a.probe_at(k), b.probe_at(k), 0};
    c.floor = kLeastStep *
              std::min(b.total_variance(c.second.backbone) - a.total_variance(c.first.backbone),
                       b.shape_variance(k) - a.shape_variance(k));
    return c;
  }

  bool settle() {
    bool asked = false;
    for (int round = 0; round <= most_rounds_; ++round) {
      bool broken = watch();
      if (!broken && (asked || outside() == 0)) broken = look_closer();
      if (!broken && (asked || outside() == 0)) return true;
      QuadraticSolution found = solve_quadratic(program(), x_);
      if (!found.solved) return false;
      x_ = std::move(found.x);
      asked = true;
    }
    return false;
  }

  // Makes slices with a density of many humps smoother, as long as no further quote leaves its
  // spread. Returns whether that went well and something is left to do.
  bool smoother() {
    constexpr double kFactor = 4;
    std::vector<std::size_t> many;
    for (std::size_t j = 0; j < models_.size(); ++j)
      if (humps(j) > kMostHumps) many.push_back(j);
    if (many.empty()) return false;
    const Blocks before = x_;
    const std::size_t out = outside();
    for (const std::size_t j : many) models_[j].roughen(kFactor);
    QuadraticSolution found = solve_quadratic(program(), x_);
    if (found.solved) {
      x_ = std::move(found.x);
      if (settle() && outside() <= out) return true;
    }
    x_ = before;
    for (const std::size_t j : many) models_[j].roughen(1 / kFactor);
    return false;
  }

  // The largest change of a quote's misfit, half-spreads.
  double change_from(const Blocks& before) const {
    double most = 0;
    for (std::size_t j = 0; j < models_.size(); ++j)
      for (const QuoteRow& q : models_[j].quotes())
        most =
            std::max(most, std::abs(models_[j].misfit(q, x_[j]) - models_[j].misfit(q, before[j])));
    return most;
  }

  // Begins to watch what is below its floor; true if anything does not pass.
  bool watch() {
    bool broken = false;
    for (std::size_t j = 0; j < models_.size(); ++j)
      for (Place& p : places_[j]) broken |= watch(j, p);
    for (std::size_t j = 0; j < crossings_.size(); ++j)
      for (Crossing& c : crossings_[j]) broken |= watch(j, c);
    return broken;
  }

  bool watch(std::size_t j, Place& place) {
    bool broken = false;
    each_condition(j, place.probe, [&](Condition condition, double value, double floor) {
      if (value >= kPasses * floor) return;
      broken = true;
      const auto bit = 1U << static_cast<unsigned>(condition);
      if ((place.watched & bit) != 0) return;
      watched_.push_back({j, place.probe, condition, floor});
      ++rows_watched_;
      place.watched |= bit;
    });
    return broken;
  }

  bool watch(std::size_t j, Crossing& c) {
    if (step(j, c) >= kPasses * c.floor) return false;
    rows_watched_ += c.watched ? 0 : 1;
    c.watched = true;
    return true;
  }

  // Calls visit(condition, value, floor) for each condition that has a meaning at a place.
  template <class Visit>
  void each_condition(std::size_t j, const Probe& p, Visit visit) const {
    const SliceModel& m = models_[j];
    const ScaledSmile at = m.smile(p, x_[j]);
    visit(Condition::positive, at.w, kLeastVariance);
    // Where variance is next to nothing the other conditions have no meaning yet.
    if (at.w < kPasses * kLeastVariance) return;
    const double own = condition_at(Condition::butterfly, p.backbone, p.z, m.s0()).value;
    const double floor = std::min(kLeastButterfly, 0.5 * own);
    const bool falls = j + 1 == models_.size() && p.z * at.slope < 0;
    for (const auto c : {Condition::butterfly, Condition::later_bend, Condition::later_turn})
      if (c == Condition::butterfly || falls)
        visit(c, condition_at(c, at, p.z, m.s0()).value, floor);
  }

  // How far the worst condition is above what passes.
  double room(std::size_t j, const Place& place) const {
    double least = HUGE_VAL;
    each_condition(j, place.probe, [&](Condition, double value, double floor) {
      least = std::min(least, value - kPasses * floor);
    });
    return least;
  }
  double room(std::size_t j, const Crossing& c) const {
    return (step(j, c) - kPasses * c.floor) / models_[j].total_variance(c.first.backbone);
  }

  Place make(std::size_t j, double k, const Place&) const { return {models_[j].probe_at(k)}; }
  Crossing make(std::size_t j, double k, const Crossing&) const { return crossing_at(j, k); }

  // Looks between the places too, about each low point, and begins to watch what is broken there.
  bool look_closer() {
    bool broken = false;
    for (std::size_t j = 0; j < models_.size(); ++j) broken |= look_closer(j, places_[j]);
    for (std::size_t j = 0; j < crossings_.size(); ++j) broken |= look_closer(j, crossings_[j]);
    return broken;
  }

  template <class At>
  bool look_closer(std::size_t j, std::vector<At>& at) {
    constexpr double kNear = 0.1;  // a low point above this is not looked at
    constexpr int kParts = 12, kNarrowings = 4;
    std::vector<double> rooms;
    for (const At& a : at) rooms.push_back(room(j, a));
    std::vector<At> found;
    for (std::size_t i = 1; i + 1 < at.size(); ++i) {
      if (rooms[i] > kNear || rooms[i] > rooms[i - 1] || rooms[i] > rooms[i + 1]) continue;
      std::optional<At> worst;
      double least = 0, low = k_of(at[i - 1]), high = k_of(at[i + 1]);
      for (int narrowing = 0; narrowing < kNarrowings; ++narrowing) {
        double lowest = HUGE_VAL, there = low;
        for (int p = 1; p < kParts; ++p) {
          const double k = std::lerp(low, high, static_cast<double>(p) / kParts);
          At here = make(j, k, at[i]);
          const double r = room(j, here);
          if (r < lowest) lowest = r, there = k;
          if (r < least) least = r, worst = std::move(here);
        }
        const double part = (high - low) / kParts;
        low = there - part;
        high = there + part;
      }
      if (worst) found.push_back(std::move(*worst));
    }
    for (At& a : found) {
      watch(j, a);
      const auto next = std::upper_bound(at.begin(), at.end(), k_of(a),
                                         [](double k, const At& b) { return k < k_of(b); });
      at.insert(next, std::move(a));
    }
    return !found.empty();
  }

  double step(std::size_t j, const Crossing& c) const {
    const SliceModel &a = models_[j], &b = models_[j + 1];
    return b.total_variance(b.smile(c.second, x_[j + 1])) -
           a.total_variance(a.smile(c.first, x_[j]));
  }

  QuadraticProgram program() const {
    QuadraticProgram out;
    for (std::size_t j = 0; j < models_.size(); ++j) {
      out.hessian.push_back(models_[j].hessian());
      out.gradient.push_back(models_[j].gradient());
      for (const QuoteRow& q : models_[j].quotes()) add_rows(j, q, out);
    }
    for (const Watched& w : watched_) out.rows.push_back(row_of(w));
    for (std::size_t j = 0; j < crossings_.size(); ++j)
      for (const Crossing& c : crossings_[j])
        if (c.watched) out.rows.push_back(row_of(j, c));
    return out;
  }

  static void add_rows(std::size_t j, const QuoteRow& q, QuadraticProgram& out) {
    if (q.stray) return;
    QuadraticRow row{j, q.basis.first, q.basis.value, kInside * q.low - q.offset, kSpreadPenalty};
    for (double& v : row.value) v *= q.scale;
    out.rows.push_back(row);
    for (double& v : row.value) v = -v;
    row.bound = q.offset - kInside * q.high;
    out.rows.push_back(row);
  }

  // A condition of one slice at one place.
  struct Watched {
    std::size_t slice;
    Probe probe;
    Condition condition;
    double floor;
  };

  // The condition to first order about where the overlay stands.
  QuadraticRow row_of(const Watched& w) const {
    const SliceModel& m = models_[w.slice];
    const Probe& p = w.probe;
    ScaledSmile at = m.smile(p, x_[w.slice]);
    if (w.condition != Condition::positive) at.w = std::max(at.w, kPasses * kLeastVariance);
    const Conditioned c = condition_at(w.condition, at, p.z, m.s0());
    QuadraticRow row{w.slice, p.basis.first, {}, w.floor - c.value, penalties_[w.slice]};
    for (std::size_t r = 0; r < 4; ++r) {
      row.value[r] = c.by_w * p.basis.value[r] + c.by_slope * p.basis.slope[r] +
                     c.by_curvature * p.basis.curvature[r];
      row.bound += row.value[r] * x_[w.slice][p.basis.first + static_cast<Eigen::Index>(r)];
    }
    return row;
  }

  // In units of the early slice's variance.
  QuadraticRow row_of(std::size_t j, const Crossing& c) const {
    const SliceModel &a = models_[j], &b = models_[j + 1];
    const double wa = a.total_variance(c.first.backbone), wb = b.total_variance(c.second.backbone);
    QuadraticRow row{
        j, c.first.basis.first, {}, (c.floor + wa - wb) / wa, penalties_[j] + penalties_[j + 1]};
    for (std::size_t r = 0; r < 4; ++r) {
      row.value[r] = -a.s0() * a.s0() / wa * c.first.basis.value[r];
      row.next_value[r] = b.s0() * b.s0() / wa * c.second.basis.value[r];
    }
    row.ties = true;
    row.next_first = c.second.basis.first;
    return row;
  }

  std::vector<SliceModel> models_;
  int most_rounds_;
  std::vector<double> penalties_;  // of conditions, by slice
  Blocks x_;
  std::vector<std::vector<Place>> places_;        // by slice, increasing in k
  std::vector<std::vector<Crossing>> crossings_;  // by earlier slice, increasing in k
  std::vector<Watched> watched_;
  std::size_t rows_watched_ = 0;
};

std::vector<SliceModel> on(const std::vector<SliceParameters>& backbones,
                           std::vector<SliceModel> models) {
  for (std::size_t j = 0; j < models.size(); ++j) {
    models[j].rebase(backbones[j]);
    models[j].choose_roughness(true);
  }
  return models;
}

}  // namespace

std::optional<std::string> OverlayOptions::problem() const {
  if (most_coefficients != 0 && (most_coefficients < 6 || most_coefficients > 64))
    return fmt::format("most_coefficients = {}, must be 0 or 6 to 64", most_coefficients);
  if (most_rounds < 1) return fmt::format("most_rounds = {}, must be >= 1", most_rounds);
  return std::nullopt;
}

Result<SurfaceFit> fit_surface(std::span<const FitSlice> slices, const FitOptions& options) {
  if (const auto problem = options.overlay.problem())
    return Failure{Fault::configuration, "overlay", *problem};
  const auto shapes = fit_backbone(slices, options.backbone);
  if (!shapes) return shapes.failure();
  SurfaceFit fit{{}, shapes->end, OverlayEnd::none};
  for (const auto& shape : shapes->slices) fit.slices.push_back({shape, {}});
  if (options.overlay.most_coefficients == 0) return fit;

  std::vector<SliceModel> models;
  for (std::size_t j = 0; j < slices.size(); ++j)
    models.emplace_back(slices[j], shapes->slices[j], options);
  const auto met = [](const SliceModel& m) { return m.met_by_backbone(); };
  for (auto& m : models) m.choose_roughness(false);
  if (std::all_of(models.begin(), models.end(), met)) return fit;
  const auto wings = wings_of(shapes->slices, models);
  OverlayFit first(on(wings, models), options.overlay.most_rounds);
  const bool settled = first.from_smooth();
  fit.overlay_end = OverlayEnd::settled;
  for (std::size_t j = 0; j < slices.size(); ++j)
    fit.slices[j] = {wings[j], first.overlay(j), first.humps(j)};
  if (settled && first.outside() == 0) return fit;
  // The backbones of the shapes are free of arbitrage by themselves: a safe place to start from.
  OverlayFit second(on(shapes->slices, models), options.overlay.most_rounds);
  second.from_backbone();
  if (settled && first.missed() <= second.missed()) return fit;
  fit.overlay_end = OverlayEnd::sheltered;
  for (std::size_t j = 0; j < slices.size(); ++j)
    fit.slices[j] = {shapes->slices[j], second.overlay(j), second.humps(j)};
  return fit;
}

}  // namespace duskgrid::surface
