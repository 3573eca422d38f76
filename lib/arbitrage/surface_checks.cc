#include "arbitrage/surface_checks.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "pricing/black.h"

namespace duskgrid::arbitrage {
namespace {

using quotes::PutCall;

// Rounding of g (terms of order 1) and of w differences, relative to w.
constexpr double kRounding = 1e-12;
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
constexpr double kInfinity = std::numeric_limits<double>::infinity();

// A time to look at: a slice, or half way to the next.
struct Stage {
  double t;
  quotes::Instant expiry;
  surface::TimedSmile smile;
  double forward, discount_factor;
};

Stage stage_at(const surface::Surface& surface, double t, quotes::Instant expiry) {
  const auto carried = surface::carried_at(surface, t);
  return {t, expiry, surface::TimedSmile(surface, t), carried.forward, carried.discount_factor};
}

Stage stage_of(const surface::Surface& surface, std::size_t slice) {
  const auto& s = surface.slices[slice];
  return stage_at(surface, s.year_fraction, s.expiry);
}

std::vector<Stage> stages_of(const surface::Surface& surface) {
  std::vector<Stage> out;
  const auto add = [&](double t, quotes::Instant expiry) {
    out.push_back(stage_at(surface, t, expiry));
  };
  for (std::size_t i = 0; i < surface.slices.size(); ++i) {
    const auto& s = surface.slices[i];
    add(s.year_fraction, s.expiry);
    if (i + 1 < surface.slices.size()) {
      const auto& next = surface.slices[i + 1];
      add(0.5 * (s.year_fraction + next.year_fraction), s.expiry + (next.expiry - s.expiry) / 2);
    }
  }
  return out;
}

double durrleman_at(const surface::TimedSmile& smile, double k) {
  const auto p = smile.at(k);
  return surface::durrleman({p.w, p.dw_dk, p.d2w_dk2}, k);
}

double call_price(const Stage& stage, double k) {
  const double strike = stage.forward * std::exp(k);
  return pricing::black_price({PutCall::call, stage.forward, strike, stage.discount_factor},
                              std::sqrt(stage.smile.at(k).w));
}

double vol_points(const Stage& stage, double k, double amount) {
  const double vol = std::sqrt(stage.smile.at(k).w / stage.t);
  const double vega = pricing::black_greeks({PutCall::call, stage.forward,
                                             stage.forward * std::exp(k), stage.discount_factor},
                                            vol, stage.t)
                          .vega;
  const double points = 100 * amount / vega;
  return std::isfinite(points) ? points : kNaN;
}

Leg call_leg(const Stage& stage, double quantity, double k) {
  return {quantity, LegType::call, stage.forward * std::exp(k), stage.expiry, call_price(stage, k)};
}

Violation butterfly_at(const Stage& stage, double k, double step) {
  const Leg middle = call_leg(stage, -1, k);
  Leg lower = call_leg(stage, 1, k - step), upper = call_leg(stage, 1, k + step);
  lower.quantity = (upper.strike - middle.strike) / (upper.strike - lower.strike);
  upper.quantity = 1 - lower.quantity;
  const double amount = middle.price - lower.quantity * lower.price - upper.quantity * upper.price;
  return {.scope = Scope::surface,
          .kind = Kind::butterfly,
          .expiry = stage.expiry,
          .strikes = {lower.strike, middle.strike, upper.strike},
          .amount = amount,
          .vol_points = vol_points(stage, k, amount),
          .half_spreads = kNaN,
          .legs = {lower, middle, upper}};
}

Violation calendar_at(const Stage& early, const Stage& late, double k) {
  const Leg sold = call_leg(early, -1, k);
  const Leg bought = call_leg(
      late, early.discount_factor * early.forward / (late.discount_factor * late.forward), k);
  const double amount = sold.price - bought.quantity * bought.price;
  return {.scope = Scope::surface,
          .kind = Kind::calendar,
          .expiry = early.expiry,
          .expiry_2 = late.expiry,
          .strikes = {sold.strike, bought.strike},
          .amount = amount,
          .vol_points = vol_points(early, k, amount),
          .half_spreads = kNaN,
          .legs = {sold, bought}};
}

// The time between two slices at which g is worst at k.
Stage worst_between(const surface::Surface& surface, std::size_t slice, double k) {
  constexpr int kParts = 64;
  const auto &a = surface.slices[slice], &b = surface.slices[slice + 1];
  int worst = 1;
  double least = kInfinity;
  for (int i = 1; i < kParts; ++i) {
    const double t = std::lerp(a.year_fraction, b.year_fraction, static_cast<double>(i) / kParts);
    const double g = durrleman_at(surface::TimedSmile(surface, t), k);
    if (g < least) least = g, worst = i;
  }
  const double t = std::lerp(a.year_fraction, b.year_fraction, static_cast<double>(worst) / kParts);
  return stage_at(surface, t, a.expiry + (b.expiry - a.expiry) * worst / kParts);
}

// Of the backbone, which has one even where an overlay leaves no volatility at the money.
double deviation(const surface::Slice& s) { return std::sqrt(s.backbone.theta); }

// Far out in a wing that is broken as a whole.
double finite(double k, const surface::Slice& s) {
  return std::isfinite(k) ? k : std::copysign(20 * deviation(s), k);
}

// Evenly over the quoted range of a slice and 20 at-the-money deviations beyond.
void add_places(const surface::Slice& s, std::vector<double>& places) {
  constexpr int kParts = 300;
  const double beyond = 20 * deviation(s);
  const double low = std::min(s.k_low, 0.0) - beyond, high = std::max(s.k_high, 0.0) + beyond;
  for (int i = 0; i <= kParts; ++i)
    places.push_back(std::lerp(low, high, static_cast<double>(i) / kParts));
}

// Where to look for the trade that locks in most: where the break was found, the forward, and over
// the smiles it is about.
std::vector<double> places_of(const surface::Surface& surface, const Finding& f, double found) {
  std::vector<double> places{found, 0};
  add_places(surface.slices[f.slice], places);
  if (f.proof == Proof::calendar || f.proof == Proof::between)
    add_places(surface.slices[f.slice + 1], places);
  return places;
}

// All its numbers exist, and what it locks in is more than the rounding of its prices.
bool sound(const Violation& v) {
  double turnover = 0;
  for (const Leg& leg : v.legs) {
    if (!(leg.strike > 0) || !std::isfinite(leg.strike)) return false;
    turnover += std::abs(leg.quantity) * leg.price;
  }
  return std::isfinite(turnover) && v.amount > kRounding * turnover;
}

// The better of what is there and a new one, if sound.
void take_better(std::optional<Violation>& best, Violation v) {
  if (sound(v) && (!best || v.amount > best->amount)) best = std::move(v);
}

std::optional<Violation> best_calendar(const Stage& early, const Stage& late,
                                       const std::vector<double>& places) {
  std::optional<Violation> best;
  for (const double k : places) take_better(best, calendar_at(early, late, k));
  return best;
}

// Narrow ones fit into small regions, in wide ones less is lost in the rounding of the prices.
std::optional<Violation> best_butterfly(const Stage& stage, double widest,
                                        const std::vector<double>& places) {
  constexpr int kWidths = 30;
  std::optional<Violation> best;
  for (std::size_t i = 0; i < places.size(); ++i)
    // The place found has every width; of the many others a few will do.
    for (int width = 0; width < kWidths; width += i == 0 ? 1 : 3)
      take_better(best, butterfly_at(stage, places[i], widest * std::exp2(-width)));
  return best;
}

class Checker {
 public:
  Checker(const surface::Surface& surface, const SurfaceCheckOptions& options)
      : surface_(surface), stages_(stages_of(surface)), points_(std::max(options.points, 3)) {
    double low = 0, high = 0, widest = 0;
    for (const auto& s : surface.slices) {
      low = std::min(low, s.k_low);
      high = std::max(high, s.k_high);
      widest = std::max(widest, std::sqrt(s.backbone.theta));
    }
    low_ = low - options.deviations * widest;
    step_ = (high + options.deviations * widest - low_) / (points_ - 1);
  }

  SurfaceCheck run() {
    for (std::size_t i = 0; i < stages_.size(); ++i) {
      check_butterflies(stages_[i]);
      if (i % 2 == 0) check_wings(stages_[i], surface_.slices[i / 2].backbone);
      if (i > 0) check_calendar(stages_[i - 1], stages_[i]);
    }
    return std::move(out_);
  }

 private:
  // Calls `broken(k)` at the lowest point of each stretch where value(k) is below -kRounding.
  template <class Value, class Broken>
  double scan(Value value, Broken broken) {
    double least = kInfinity, worst = 0, worst_k = 0;
    for (int i = 0; i <= points_; ++i) {
      const double k = low_ + step_ * i;
      const double v = i < points_ ? value(k) : 0;  // the sentinel ends the last stretch
      if (i < points_) least = std::min(least, v);
      if (v < std::min(worst, -kRounding)) {
        worst = v;
        worst_k = k;
      } else if (v >= -kRounding && worst < 0) {
        broken(worst_k);
        worst = 0;
      }
    }
    return least;
  }

  void check_butterflies(const Stage& stage) {
    const double least =
        scan([&](double k) { return durrleman_at(stage.smile, k); },
             [&](double k) { out_.violations.push_back(butterfly_at(stage, k, step_)); });
    out_.least_durrleman = std::min(out_.least_durrleman, least);
  }

  void check_calendar(const Stage& early, const Stage& late) {
    const double least =
        scan([&](double k) { return late.smile.at(k).w - early.smile.at(k).w; },
             [&](double k) { out_.violations.push_back(calendar_at(early, late, k)); });
    out_.least_calendar_step = std::min(out_.least_calendar_step, least);
  }

  // Lee 2004: w grows by no more than 2 |k| in either wing; here the slopes are psi (1 +- rho) / 2.
  void check_wings(const Stage& stage, const surface::SliceParameters& p) {
    if (0.5 * p.psi * (1 + std::abs(p.rho)) <= 2) return;
    const double k = p.rho > 0 ? low_ + step_ * (points_ - 1) : low_;
    Violation v = butterfly_at(stage, k, step_);
    v.kind = Kind::wing;
    out_.violations.push_back(std::move(v));
  }

  const surface::Surface& surface_;
  std::vector<Stage> stages_;  // every second one is a slice
  int points_;
  double low_, step_;
  SurfaceCheck out_{{}, kInfinity, kInfinity};
};

}  // namespace

std::optional<Violation> violation_of(const surface::Surface& surface, const Finding& f) {
  const bool tradable =
      f.proof == Proof::butterfly || f.proof == Proof::calendar || f.proof == Proof::between;
  if (!f.broken || !tradable) return std::nullopt;
  const surface::Slice& slice = surface.slices[f.slice];
  const Stage stage = stage_of(surface, f.slice);
  const double found = finite(f.k, slice);
  const auto places = places_of(surface, f, found);
  if (f.proof == Proof::calendar)
    return best_calendar(stage, stage_of(surface, f.slice + 1), places);
  auto best =
      best_butterfly(f.proof == Proof::between ? worst_between(surface, f.slice, found) : stage,
                     deviation(slice), places);
  if (best && !std::isfinite(f.k)) best->kind = Kind::wing;
  return best;
}

std::vector<Violation> violations_of(const surface::Surface& surface,
                                     const Certificate& certificate) {
  std::vector<Violation> out;
  for (const Finding& f : certificate.findings)
    if (auto violation = violation_of(surface, f)) out.push_back(std::move(*violation));
  return out;
}

SurfaceCheck check_surface(const surface::Surface& surface, const SurfaceCheckOptions& options) {
  return Checker(surface, options).run();
}

}  // namespace duskgrid::arbitrage
