#include "pricing/american.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

// A put of unit strike and unit time.
struct UnitPut {
  double rate, yield;  // r t, q t
  double total_vol;
};

// Below this total volatility nothing moves within rounding; the other is where squares are safe.
constexpr double kLeastTotalVol = 1e-7, kMostTotalVol = 1e6;
// Rates whose whole premium is lost in rounding.
constexpr double kLeastPremium = 1e-15;

double log_limit(const UnitPut& put) {
  return put.yield > put.rate ? std::log(put.rate / put.yield) : 0.0;
}

// The perpetual put is (1 - b) (S / b)^power above its boundary b = power / (power - 1).
// R. Merton, Bell J. Economics 4 (1973) 141-183.
double perpetual_power(const UnitPut& put) {
  const double variance = put.total_vol * put.total_vol;
  const double a = 0.5 - (put.rate - put.yield) / variance;
  const double root = std::sqrt(a * a + 2 * put.rate / variance);
  return a > 0 ? -2 * put.rate / variance / (a + root) : a - root;
}

// ln b, -inf where there is no boundary.
double log_perpetual(const UnitPut& put) { return -std::log1p(-1 / perpetual_power(put)); }

// Whether the put is worth the perpetual one: what is not exercised within the time never will be.
// Either the drift carries the spot up and away, the chance of coming back being below exp(-drift^2
// / (2 s^2)) < 1e-17; or all spots end near 0, past any boundary, but for a share of exp(-s^2 / 8)
// < 1e-14. The boundary changes too fast to be collocated, and need not be.
bool as_good_as_perpetual(const UnitPut& put) {
  constexpr double kDeviations = 9, kGreatVol = 16;
  const double drift = put.rate - put.yield - 0.5 * put.total_vol * put.total_vol;
  return put.total_vol > kGreatVol || (put.rate > 0 && drift > kDeviations * put.total_vol);
}

// Whether the drift is so much down that the boundary is the perpetual one but for the last 1e-4 of
// the time, in which it hardly matters (less than s / 2e6).
bool is_flat(const UnitPut& put) {
  constexpr double kDeviations = 100;
  return put.yield - put.rate > kDeviations * put.total_vol;
}

double perpetual_put(const UnitPut& put, double log_spot) {
  const double power = perpetual_power(put);
  if (power >= 0) return 1;  // without a rate there is no boundary, and no hurry
  const double level = log_perpetual(put);
  return -std::expm1(level) * std::exp(power * (log_spot - level));
}

// Falls from 0 with the slope 1.5 s in the root of time, and levels out at -depth.
std::vector<double> first_guess(const UnitPut& put, const CollocationRule& rule, double depth) {
  constexpr double kSlope = 1.5;
  std::vector<double> beta;
  for (const double root : rule.root) {
    const double fall = kSlope * put.total_vol * root;
    beta.push_back(std::isfinite(depth) ? depth * std::expm1(-fall / depth) : -fall);
  }
  return beta;
}

// Row-major square system solved in place. The boundary at a time depends on what is left of it
// alone, so the matrix is near triangular and needs no pivots.
void solve_in_place(std::vector<double>& matrix, std::vector<double>& right) {
  const std::size_t n = right.size();
  for (std::size_t c = 0; c < n; ++c)
    for (std::size_t r = c + 1; r < n; ++r) {
      const double factor = matrix[r * n + c] / matrix[c * n + c];
      for (std::size_t k = c; k < n; ++k) matrix[r * n + k] -= factor * matrix[c * n + k];
      right[r] -= factor * right[c];
    }
  for (std::size_t r = n; r-- > 0;) {
    for (std::size_t k = r + 1; k < n; ++k) right[r] -= matrix[r * n + k] * right[k];
    right[r] /= matrix[r * n + r];
  }
}

struct BetaAt {
  double value;
  bool interpolated;  // else held at a floor, where interpolation overshoots next to expiry
};

BetaAt beta_at(const std::vector<double>& squares, const double* row, double left, double root) {
  double square = 0;
  for (std::size_t j = 0; j < squares.size(); ++j) square += row[j] * squares[j];
  // beta^2 grows about as u to the last node, and never falls.
  const double share = std::min(1.0, left / root);
  const double floor = std::max(0.05 * squares.back() * share * share, 1e-300);
  return square > floor ? BetaAt{-std::sqrt(square), true} : BetaAt{-std::sqrt(floor), false};
}

// The residual of each node, and its derivatives by every beta.
class BoundaryEquations {
 public:
  BoundaryEquations(const UnitPut& put, const CollocationRule& rule)
      : put_(put), rule_(rule), limit_(log_limit(put)) {
    for (std::size_t k = 0; k < rule.ages.points; ++k) {
      const double v = rule.ages.root_age[k] * rule.ages.root_age[k];
      rate_decay_.push_back(rule.ages.weight[k] * std::exp(-put.rate * v));
      yield_decay_.push_back(rule.ages.weight[k] * std::exp(-put.yield * v));
    }
  }

  // With A = int e^{-rv} n(d2) (r - q B(u)) / (s sqrt v) dv and M = int e^{-qv} N(d1) dv, d at B(t)
  // over B(u), smooth pasting at t is A = B(t) (e^{-qt} N(d1(t, B/K)) + q M): its logarithm,
  // M on the side where it is positive.
  void evaluate(const std::vector<double>& beta, std::vector<double>& residual,
                std::vector<double>& jacobian) {
    const std::size_t n = rule_.nodes;
    squares_.assign(n, 0);
    for (std::size_t j = 0; j < n; ++j) squares_[j] = beta[j] * beta[j];
    for (std::size_t i = 0; i < n; ++i) residual[i] = equation(beta, i, jacobian.data() + i * n);
  }

 private:
  double equation(const std::vector<double>& beta, std::size_t i, double* row) {
    const std::size_t n = rule_.nodes;
    const double s = put_.total_vol, root = rule_.root[i], time = root * root, b = beta[i];
    const double carry = put_.rate - put_.yield, level = std::exp(b + limit_);
    double a = 0, a_slope = 0, m = 0, m_slope = 0;
    by_a_.assign(n, 0);
    by_m_.assign(n, 0);
    for (std::size_t k = i * rule_.points; k < (i + 1) * rule_.points; ++k) {
      const double* weights = rule_.ages.interpolation.data() + k * n;
      const BetaAt other = beta_at(squares_, weights, rule_.ages.root_left[k], rule_.root[n - 1]);
      const double age = rule_.ages.root_age[k], v = age * age, deviation = s * age;
      const double d2 = (b - other.value + carry * v) / deviation - 0.5 * deviation;
      const double d1 = d2 + deviation;
      const double level_then = std::exp(other.value + limit_);
      const double earned = put_.yield * level_then;
      const double density = rate_decay_[k] * normal_pdf(d2) / s;
      const double term = density * (put_.rate - earned);
      const double decay = yield_decay_[k];
      // B(t) e^{-qv} n(d1) = B(u) e^{-rv} n(d2).
      const double m_term = density * level_then / level;
      a += term;
      a_slope -= term * d2 / deviation;
      m += decay * age * normal_cdf(d1);
      m_slope += m_term;
      if (!other.interpolated) continue;
      const double of_a = (term * d2 / deviation - density * earned) / other.value;
      const double of_m = m_term / other.value;
      for (std::size_t j = 0; j < n; ++j) {
        by_a_[j] += of_a * weights[j];
        by_m_[j] -= of_m * weights[j];
      }
    }
    const double deviation = s * root;
    const double d1 = (b + limit_ + carry * time) / deviation + 0.5 * deviation;
    const double decay = std::exp(-put_.yield * time);
    const double gains = std::max(put_.yield, 0.0), costs = std::max(-put_.yield, 0.0);
    const double left = a / level + costs * m;
    const double right = decay * normal_cdf(d1) + gains * m;
    for (std::size_t j = 0; j < n; ++j)
      row[j] = beta[j] * ((by_a_[j] / level + costs * by_m_[j]) / left - gains * by_m_[j] / right);
    row[i] += ((a_slope - a) / level + costs * m_slope) / left -
              (decay * normal_pdf(d1) / deviation + gains * m_slope) / right;
    return std::log(left) - std::log(right);
  }

  UnitPut put_;
  const CollocationRule& rule_;
  double limit_;
  std::vector<double> rate_decay_, yield_decay_;  // weight e^{-rv}, weight e^{-qv}
  std::vector<double> squares_, by_a_, by_m_;
};

// One step of Newton's, no beta moving by more than a factor of two. Returns the largest move.
double newton_step(BoundaryEquations& equations, std::vector<double>& beta, double total_vol) {
  std::vector<double> residual(beta.size()), jacobian(beta.size() * beta.size());
  equations.evaluate(beta, residual, jacobian);
  solve_in_place(jacobian, residual);
  double most = 0;
  for (std::size_t i = 0; i < beta.size(); ++i) {
    const double moved = std::clamp(beta[i] - residual[i], 2 * beta[i], 0.5 * beta[i]);
    if (!std::isfinite(moved)) return std::numeric_limits<double>::infinity();
    most = std::max(most, std::abs(moved - beta[i]) / (std::abs(beta[i]) + 0.01 * total_vol));
    beta[i] = moved;
  }
  return most;
}

// What exercise earns a unit of time at age v, the boundary being at log_boundary then.
double earned(const UnitPut& put, double log_spot, double log_boundary, double v) {
  const double deviation = put.total_vol * std::sqrt(v);
  const double d2 =
      (log_spot - log_boundary + (put.rate - put.yield) * v) / deviation - 0.5 * deviation;
  return put.rate * std::exp(-put.rate * v) * normal_cdf(-d2) -
         put.yield * std::exp(log_spot - put.yield * v) * normal_cdf(-d2 - deviation);
}

// The premium by double exponential quadrature on either side of the age at which a spot that
// drifts down comes to the boundary, where the integrand is a step of the width s / drift.
double split_premium(const UnitPut& put, const PutBoundary& boundary,
                     const CollocationRule& collocation, std::size_t points, double log_spot) {
  const double met = (log_spot - boundary.log_limit) / (put.yield - put.rate);
  const double split = std::clamp(met, 0.0, 1.0);
  std::vector<double> squares, row(collocation.nodes);
  for (const double b : boundary.beta) squares.push_back(b * b);
  const auto log_boundary_at = [&](double left) {
    if (boundary.flat) return boundary.log_limit + boundary.beta.front();
    interpolation_row(collocation.root, left, row.data());
    return boundary.log_limit + beta_at(squares, row.data(), left, collocation.root.back()).value;
  };
  double sum = 0;
  for (const auto& point : double_exponential_rule(points)) {
    const double early = split * point.from_low, late = split + (1 - split) * point.from_low;
    if (split > 0)
      sum += split * point.weight *
             earned(put, log_spot, log_boundary_at(std::sqrt(1 - early)), early);
    if (split < 1)
      sum += (1 - split) * point.weight *
             earned(put, log_spot, log_boundary_at(std::sqrt((1 - split) * point.from_high)), late);
  }
  return std::max(sum, 0.0);
}

double premium(const UnitPut& put, const PutBoundary& boundary, const CollocationRule& collocation,
               const AgeRule& rule, double log_spot) {
  constexpr double kStep = 5;  // deviations of drift from which the integrand is a step
  if (boundary.perpetual) {
    const BlackTerms black{PutCall::put, std::exp(log_spot + put.rate - put.yield), 1.0,
                           std::exp(-put.rate)};
    return std::max(perpetual_put(put, log_spot) - black_price(black, put.total_vol), 0.0);
  }
  if (put.yield - put.rate > kStep * put.total_vol)
    return split_premium(put, boundary, collocation, rule.points, log_spot);
  std::vector<double> squares;
  for (const double b : boundary.beta) squares.push_back(b * b);
  double sum = 0;
  for (std::size_t k = 0; k < rule.points; ++k) {
    const double* row = rule.interpolation.data() + k * rule.nodes;
    const double beta = beta_at(squares, row, rule.root_left[k], collocation.root.back()).value;
    const double age = rule.root_age[k];
    sum += rule.weight[k] * age * earned(put, log_spot, boundary.log_limit + beta, age * age);
  }
  return std::max(sum, 0.0);
}

AmericanTerms as_put(const AmericanTerms& t) {
  if (t.put_call == PutCall::put) return t;
  return {PutCall::put, t.strike, t.spot, t.carry_yield, t.rate, t.year_fraction};
}

double exercised(const AmericanTerms& put, double time) {
  return put.strike * std::exp(-put.rate * time) - put.spot * std::exp(-put.carry_yield * time);
}

bool sound(const AmericanTerms& t, double vol) {
  const auto positive = [](double v) { return std::isfinite(v) && v > 0; };
  constexpr double kMostRate = 600;  // beyond, discount factors leave the doubles
  return positive(t.spot) && positive(t.strike) && t.year_fraction >= 0 && vol >= 0 &&
         std::isfinite(t.year_fraction) && std::isfinite(vol) &&
         std::abs(t.rate * t.year_fraction) < kMostRate &&
         std::abs(t.carry_yield * t.year_fraction) < kMostRate;
}

}  // namespace

std::string_view word(AmericanStatus status) {
  constexpr std::array<std::string_view, 4> kWords{"ok", "two boundaries", "not converged",
                                                   "not finite"};
  return kWords[static_cast<std::size_t>(status)];
}

ExerciseKind exercise_kind(PutCall put_call, double rate, double carry_yield) {
  const double r = put_call == PutCall::put ? rate : carry_yield;
  const double q = put_call == PutCall::put ? carry_yield : rate;
  if (r > 0 || (r == 0 && q < 0)) return ExerciseKind::one_side;
  return q >= r ? ExerciseKind::never : ExerciseKind::between;
}

double american_floor(const AmericanTerms& terms) {
  const AmericanTerms put = as_put(terms);
  const double t = put.year_fraction;
  double best = std::max({0.0, exercised(put, 0), exercised(put, t)});
  // The one time where waiting neither gains nor loses: r K e^{-rv} = q S e^{-qv}.
  const double ratio = put.carry_yield * put.spot / (put.rate * put.strike);
  if (ratio > 0 && put.carry_yield != put.rate) {
    const double at = std::log(ratio) / (put.carry_yield - put.rate);
    if (at > 0 && at < t) best = std::max(best, exercised(put, at));
  }
  return best;
}

double american_ceiling(const AmericanTerms& terms) {
  const AmericanTerms put = as_put(terms);
  return put.strike * std::max(1.0, std::exp(-put.rate * put.year_fraction));
}

AmericanEngine::AmericanEngine(const AmericanAccuracy& accuracy)
    : accuracy_(accuracy),
      collocation_(collocation_rule(accuracy.boundary_nodes, accuracy.boundary_points)),
      premium_(double_exponential_premium_rule(accuracy.boundary_nodes, accuracy.premium_points)) {}

PutBoundary AmericanEngine::put_boundary(double rate, double yield, double total_vol) const {
  constexpr double kSettled = 1e-13, kNear = 1e-7;
  const UnitPut put{rate, yield, total_vol};
  const std::size_t n = collocation_.nodes;
  PutBoundary out{false, as_good_as_perpetual(put), is_flat(put), log_limit(put), {}};
  if (out.perpetual || out.flat) {
    out.converged = true;
    out.beta.assign(n, log_perpetual(put) - out.log_limit);
    return out;
  }
  BoundaryEquations equations(put, collocation_);
  const double perpetual = std::max(log_limit(put) - log_perpetual(put), 1e-12);
  // The second guess, that time is too short to level out, is for rates next to nothing.
  for (const double depth : {perpetual, std::numeric_limits<double>::infinity()}) {
    out.beta = first_guess(put, collocation_, depth);
    double last = std::numeric_limits<double>::infinity();
    for (int step = 0; step < accuracy_.newton_steps; ++step) {
      const double moved = newton_step(equations, out.beta, total_vol);
      // Steps that no longer shrink have reached what rounding allows.
      out.converged = moved < kSettled || (moved < kNear && moved > 0.3 * last);
      if (out.converged) return out;
      last = moved;
      if (!std::isfinite(moved)) break;
    }
  }
  return out;
}

AmericanPrice AmericanEngine::price(const AmericanTerms& terms, double vol) const {
  if (!sound(terms, vol)) return {AmericanStatus::not_finite, 0, 0, 0, false};
  const bool is_put = terms.put_call == PutCall::put;
  const double never = is_put ? 0.0 : std::numeric_limits<double>::infinity();
  const double intrinsic =
      std::max(0.0, is_put ? terms.strike - terms.spot : terms.spot - terms.strike);
  const double t = terms.year_fraction, s = std::min(vol * std::sqrt(t), kMostTotalVol);
  const BlackTerms black{terms.put_call,
                         terms.spot * std::exp((terms.rate - terms.carry_yield) * t), terms.strike,
                         std::exp(-terms.rate * t)};
  const double european = black_price(black, s);
  const auto kind = exercise_kind(terms.put_call, terms.rate, terms.carry_yield);
  if (kind == ExerciseKind::between) return {AmericanStatus::two_boundaries, 0, 0, never, false};
  const AmericanTerms put = as_put(terms);
  const UnitPut unit{put.rate * t, put.carry_yield * t, s};
  const double most = std::max(unit.rate, 0.0) + std::max(-unit.yield, 0.0);
  if (kind == ExerciseKind::never || most < kLeastPremium)
    return {AmericanStatus::ok, european, european, never, false};
  if (s < kLeastTotalVol) {
    const double floor = american_floor(terms);
    const double limit = std::exp(log_limit(unit));
    return {AmericanStatus::ok, floor, european,
            is_put ? terms.strike * limit : terms.strike / limit,
            intrinsic > 0 && floor <= intrinsic};
  }
  const PutBoundary boundary = put_boundary(unit.rate, unit.yield, s);
  if (!boundary.converged) return {AmericanStatus::not_converged, 0, 0, never, false};
  const double log_exercise = boundary.log_limit + boundary.beta.front();
  const double log_spot = std::log(put.spot / put.strike);
  const double exercise_spot = terms.strike * std::exp(is_put ? log_exercise : -log_exercise);
  if (log_spot <= log_exercise)
    return {AmericanStatus::ok, intrinsic, european, exercise_spot, true};
  const double early = put.strike * premium(unit, boundary, collocation_, premium_, log_spot);
  return {AmericanStatus::ok, std::max(european + early, intrinsic), european, exercise_spot,
          false};
}

}  // namespace duskgrid::pricing
