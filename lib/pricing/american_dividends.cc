#include "pricing/american_dividends.h"

#include <algorithm>
#include <cmath>
#include <vector>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;
using Values = std::vector<double>;

// A tridiagonal matrix by its rows.
struct Tridiagonal {
  Values lower, diagonal, upper;
};

struct Problem {
  AmericanTerms terms;
  double vol;
  Style style;
  Shortfall shortfall;
  std::vector<Dividend> dividends;  // latest first
};

double payoff(const AmericanTerms& terms, double spot) {
  const double call = spot - terms.strike;
  return std::max(0.0, terms.put_call == PutCall::call ? call : -call);
}

// Spots around the strike, even in the argument of sinh. Strike and spot are among them: next to
// the exercise boundary, where the curvature jumps, interpolation would cost digits.
Values spots_of(const Problem& p, std::size_t intervals) {
  constexpr double kDeviations = 7;
  const double s = p.vol * std::sqrt(p.terms.year_fraction);
  const double drift = std::abs(p.terms.rate - p.terms.carry_yield) * p.terms.year_fraction;
  double paid = 0;
  for (const Dividend& d : p.dividends)
    if (d.kind == DividendKind::cash) paid += d.amount;
  const double strike = p.terms.strike;
  const double top = std::max(p.terms.spot, strike) * std::exp(kDeviations * s + drift) + paid;
  const double width = strike * std::min(s, 1.0);
  const double low = std::asinh(strike / width), high = std::asinh((top - strike) / width);
  double step = (low + high) / static_cast<double>(intervals);
  const double from_strike = std::abs(std::asinh((p.terms.spot - strike) / width));
  // In pairs of steps, so that the coarser grid has the spot as well.
  const double pairs = std::round(0.5 * from_strike / step);
  if (pairs > 1) step = 0.5 * from_strike / pairs;
  Values spots{0.0};
  for (double at = -std::floor(low / step - 0.5); at <= std::ceil(high / step); ++at)
    spots.push_back(strike + width * std::sinh(at * step));
  return spots;
}

// The operator of the Black-Scholes equation backwards in time: V_t = L V.
Tridiagonal operator_of(const Problem& p, const Values& spots) {
  const std::size_t n = spots.size();
  Tridiagonal m{Values(n), Values(n, -p.terms.rate), Values(n)};
  const double drift = p.terms.rate - p.terms.carry_yield;
  for (std::size_t i = 1; i + 1 < n; ++i) {
    const double down = spots[i] - spots[i - 1], up = spots[i + 1] - spots[i], both = up + down;
    const double half_variance = p.vol * p.vol * spots[i] * spots[i];  // twice a half
    double lower = half_variance / (down * both) - drift * spots[i] * up / (down * both);
    double upper = half_variance / (up * both) + drift * spots[i] * down / (up * both);
    // Next to 0 drift outweighs diffusion: differences against the stream keep the signs that the
    // active sets need.
    if (lower < 0 || upper < 0) {
      lower = half_variance / (down * both) + std::max(0.0, -drift) * spots[i] / down;
      upper = half_variance / (up * both) + std::max(0.0, drift) * spots[i] / up;
    }
    m.lower[i] = lower;
    m.upper[i] = upper;
    m.diagonal[i] -= lower + upper;
  }
  // Far out the value is linear in the spot.
  const double last = drift * spots[n - 1] / (spots[n - 1] - spots[n - 2]);
  m.lower[n - 1] = -last;
  m.diagonal[n - 1] += last;
  return m;
}

// One solver a grid; holds its work arrays.
class Stepper {
 public:
  Stepper(const Problem& problem, const Values& spots)
      : american_(problem.style == Style::american), operator_(operator_of(problem, spots)) {
    for (const double spot : spots) exercise_.push_back(payoff(problem.terms, spot));
    active_.assign(spots.size(), false);
    right_.resize(spots.size());
    next_.resize(spots.size());
    ratio_.resize(spots.size());
  }

  const Values& exercise() const { return exercise_; }

  // A step back in time, implicit by the share `implicit`.
  void step(Values& values, double dt, double implicit) {
    const std::size_t n = values.size();
    for (std::size_t i = 0; i < n; ++i)
      right_[i] = values[i] + (1 - implicit) * dt * applied(values, i);
    constexpr int kRounds = 100;  // two or three are usual
    const double weight = implicit * dt;
    for (int round = 0; round < kRounds; ++round) {
      solve(weight);
      if (!american_ || !change_active(weight)) break;
    }
    values.swap(next_);
  }

 private:
  double applied(const Values& v, std::size_t i) const {
    double sum = operator_.diagonal[i] * v[i];
    if (i > 0) sum += operator_.lower[i] * v[i - 1];
    if (i + 1 < v.size()) sum += operator_.upper[i] * v[i + 1];
    return sum;
  }

  // (1 - weight L) next = right, but next = exercise where active.
  void solve(double weight) {
    const std::size_t n = next_.size();
    for (std::size_t i = 0; i < n; ++i) {
      if (active_[i]) {
        ratio_[i] = 0;
        next_[i] = exercise_[i];
        continue;
      }
      const double lower = -weight * operator_.lower[i];
      const double pivot = 1 - weight * operator_.diagonal[i] - (i > 0 ? lower * ratio_[i - 1] : 0);
      ratio_[i] = -weight * operator_.upper[i] / pivot;
      next_[i] = (right_[i] - (i > 0 ? lower * next_[i - 1] : 0)) / pivot;
    }
    for (std::size_t i = n - 1; i-- > 0;) next_[i] -= ratio_[i] * next_[i + 1];
  }

  // Exercised is what would else be worth less than exercise, and what exercise adds to. Whether
  // any spot changed sides.
  bool change_active(double weight) {
    bool changed = false;
    for (std::size_t i = 0; i < next_.size(); ++i) {
      const bool is_active = active_[i] ? next_[i] - weight * applied(next_, i) >= right_[i]
                                        : next_[i] < exercise_[i] * (1 - 1e-14);
      changed = changed || is_active != active_[i];
      active_[i] = is_active;
    }
    return changed;
  }

  bool american_;
  Tridiagonal operator_;
  Values exercise_, right_, next_, ratio_;
  std::vector<bool> active_;
};

// Cubic through the four nearest points.
double interpolated(const Values& spots, const Values& values, double at) {
  const std::size_t n = spots.size();
  const auto above = std::upper_bound(spots.begin(), spots.end(), at) - spots.begin();
  const std::size_t first =
      static_cast<std::size_t>(std::clamp<std::ptrdiff_t>(above - 2, 0, std::ptrdiff_t(n) - 4));
  double sum = 0;
  for (std::size_t i = first; i < first + 4; ++i) {
    double weight = 1;
    for (std::size_t j = first; j < first + 4; ++j)
      if (j != i) weight *= (at - spots[j]) / (spots[i] - spots[j]);
    sum += weight * values[i];
  }
  return sum;
}

double after(const Dividend& dividend, Shortfall shortfall, double spot) {
  if (dividend.kind == DividendKind::proportional) return spot * (1 - dividend.amount);
  if (spot >= dividend.amount) return spot - dividend.amount;
  return shortfall == Shortfall::liquidator ? 0.0 : spot;
}

void go_ex(const Problem& p, const Dividend& dividend, const Values& spots, const Values& exercise,
           Values& values) {
  Values before(values.size());
  for (std::size_t i = 0; i < spots.size(); ++i) {
    before[i] = std::max(0.0, interpolated(spots, values, after(dividend, p.shortfall, spots[i])));
    if (p.style == Style::american) before[i] = std::max(before[i], exercise[i]);
  }
  values.swap(before);
}

// Back over an interval without dividends, steps growing linearly from its end.
void go_back(Stepper& stepper, Values& values, double length, std::size_t steps) {
  constexpr std::size_t kDamped = 2;
  const double count = static_cast<double>(steps);
  for (std::size_t j = 0; j < steps; ++j) {
    const double at = static_cast<double>(j);
    const double dt = length * (2 * at + 1) / (count * count);
    if (j < kDamped) {
      stepper.step(values, 0.5 * dt, 1.0);
      stepper.step(values, 0.5 * dt, 1.0);
    } else {
      stepper.step(values, dt, 0.5);
    }
  }
}

// Whether the exercise boundary is among the points next to the spot.
bool is_near_boundary(const Values& spots, const Values& values, const Values& exercise,
                      double at) {
  constexpr std::ptrdiff_t kPoints = 4;
  const auto above = std::upper_bound(spots.begin(), spots.end(), at) - spots.begin();
  const auto first = std::max<std::ptrdiff_t>(above - 1 - kPoints, 0),
             last = std::min<std::ptrdiff_t>(above + kPoints, std::ptrdiff_t(spots.size()));
  bool exercised = false, held = false;
  for (auto i = static_cast<std::size_t>(first); i < static_cast<std::size_t>(last); ++i)
    (exercise[i] > 0 && values[i] <= exercise[i] * (1 + 1e-14) ? exercised : held) = true;
  return exercised && held;
}

struct GridPrice {
  double price;
  bool near_boundary;
};

GridPrice price_on_grid(const Problem& p, std::size_t intervals, std::size_t steps,
                        std::size_t least_steps) {
  const Values spots = spots_of(p, intervals);
  Stepper stepper(p, spots);
  Values values = stepper.exercise();
  double left = p.terms.year_fraction;
  const auto back_to = [&](double time) {
    const double share = std::sqrt((left - time) / p.terms.year_fraction);
    const auto wanted = static_cast<std::size_t>(std::ceil(static_cast<double>(steps) * share));
    go_back(stepper, values, left - time, std::max(least_steps, wanted));
    left = time;
  };
  for (const Dividend& d : p.dividends) {
    if (d.time < left) back_to(d.time);
    go_ex(p, d, spots, stepper.exercise(), values);
  }
  back_to(0);
  const double price = interpolated(spots, values, p.terms.spot);
  if (p.style == Style::european) return {price, false};
  return {std::max(price, payoff(p.terms, p.terms.spot)),
          is_near_boundary(spots, values, stepper.exercise(), p.terms.spot)};
}

bool sound(const AmericanTerms& t, double vol, std::span<const Dividend> dividends) {
  constexpr double kMostRate = 20, kLeast = 1e-3, kMost = 5;
  const auto positive = [](double v) { return std::isfinite(v) && v > 0; };
  const auto is_sound = [](const Dividend& d) {
    return std::isfinite(d.time) && std::isfinite(d.amount) && d.amount >= 0 &&
           (d.kind == DividendKind::cash || d.amount < 1);
  };
  const double s = vol * std::sqrt(t.year_fraction);
  return positive(t.spot) && positive(t.strike) && positive(t.year_fraction) && s >= kLeast &&
         s <= kMost && std::abs(t.rate * t.year_fraction) < kMostRate &&
         std::abs(t.carry_yield * t.year_fraction) < kMostRate &&
         std::all_of(dividends.begin(), dividends.end(), is_sound);
}

}  // namespace

DividendPrice price_with_dividends(const AmericanTerms& terms, double vol,
                                   std::span<const Dividend> dividends,
                                   const DividendOptions& options) {
  constexpr std::size_t kLeastSpots = 16, kLeastSteps = 8, kPerInterval = 24;
  if (!sound(terms, vol, dividends) || options.spots < kLeastSpots || options.steps < kLeastSteps)
    return {AmericanStatus::not_finite, 0, 0};
  Problem problem{terms, vol, options.style, options.shortfall, {}};
  for (const Dividend& d : dividends)
    if (d.time > 0 && d.time < terms.year_fraction) problem.dividends.push_back(d);
  std::stable_sort(problem.dividends.begin(), problem.dividends.end(),
                   [](const Dividend& a, const Dividend& b) { return a.time > b.time; });
  // Next to the boundary the curvature jumps within a cell, which no extrapolation takes out: the
  // grid has to be finer.
  constexpr std::size_t kFiner = 8, kMoreSteps = 2;
  std::size_t intervals = options.spots, steps = options.steps, least = kPerInterval;
  GridPrice coarse = price_on_grid(problem, intervals, steps, least);
  if (coarse.near_boundary) {
    intervals *= kFiner, steps *= kMoreSteps, least *= kMoreSteps;
    coarse = price_on_grid(problem, intervals, steps, least);
  }
  const GridPrice fine = price_on_grid(problem, 2 * intervals, 2 * steps, 2 * least);
  const double price = fine.price + (fine.price - coarse.price) / 3;
  const double floor = options.style == Style::american ? payoff(terms, terms.spot) : 0.0;
  return {AmericanStatus::ok, std::max(price, floor), price - fine.price};
}

}  // namespace duskgrid::pricing
