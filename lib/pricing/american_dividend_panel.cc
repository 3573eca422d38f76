#include "pricing/american_dividend_panel.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdint>
#include <numbers>

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "pricing/american_dividend_panel.cc"
#include <hwy/foreach_target.h>
// After foreach_target, which compiles this file once a target.
#include <hwy/highway.h>

#include "pricing/american_kernel-inl.h"

#ifndef DUSKGRID_PRICING_AMERICAN_DIVIDEND_PANEL_ONCE
#define DUSKGRID_PRICING_AMERICAN_DIVIDEND_PANEL_ONCE
namespace duskgrid::pricing {
namespace {

// One step back in time: (1 - g d2) u' = (1 + e d2) u, d2 the second difference, as
// y = p u + q (u of both neighbours) + rho (y before), then u' = y + rho (u' after).
struct Step {
  double length, p, q, rho;
};

// What exercise at one fixed time is worth far in the money, a S - b / K - k for a call.
struct Claim {
  double spot, paid, strike;
};

// What all lanes share. Points run from out of the money to in the money: ln(S/K) of point i is
// sign (i - at_strike) spacing s.
struct GridPlan {
  double sign, rate, yield, spacing;
  std::size_t points, at_strike;
  bool any_time;  // exercise between dividends can pay
  bool survivor;
  bool with_correction;                      // else corrections are left without meaning
  std::vector<std::vector<Step>> intervals;  // from expiry back
  std::vector<PanelDividend> dividends;      // after each interval but the last
};

// Points x lanes each, of a unit strike; lanes a multiple of 8.
struct GridLanes {
  std::size_t lanes;
  std::vector<double> total_vols, per_strike;       // 1/K
  std::vector<double> premiums, corrections, gaps;  // gap: of the American price over exercise
};

}  // namespace
}  // namespace duskgrid::pricing
#endif

HWY_BEFORE_NAMESPACE();
namespace duskgrid::pricing {
namespace HWY_NAMESPACE {

// All systems of as many lanes as a vector has.
class GridBlock {
 public:
  GridBlock(const GridPlan& plan, V total_vol, V per_strike)
      : plan_(plan), s_(total_vol), per_strike_(per_strike) {
    const std::size_t size = plan.points * width();
    for (auto* values :
         {&american_, &european_, &correction_, &exercise_, &weight_, &next_a_, &next_e_, &next_c_})
      values->assign(size, 0.0);
    const auto variance = s_ * s_;
    alpha_ = number(0.5) - number(plan.rate - plan.yield) / variance;
    beta_ = hn::Neg(number(plan.rate) + number(0.5) * variance * alpha_ * alpha_);
    begin();
  }

  void run() {
    for (std::size_t k = 0; k < plan_.intervals.size(); ++k) {
      for (const Step& step : plan_.intervals[k]) go_back(step);
      if (k < plan_.dividends.size()) go_ex(plan_.dividends[k]);
    }
  }

  void store(GridLanes& lanes, std::size_t at) const {
    const PanelTag d;
    const auto now = exponential(hn::Neg(beta_ * number(age_)));
    for (std::size_t i = 0; i < plan_.points; ++i) {
      const auto per = number(1.0) / (load(weight_, i) * now);
      const std::size_t to = i * lanes.lanes + at;
      const auto a = load(american_, i);
      hn::StoreU((a - load(european_, i)) * per, d, lanes.premiums.data() + to);
      hn::StoreU(load(correction_, i) * per, d, lanes.corrections.data() + to);
      hn::StoreU((a - load(exercise_, i) * now) * per, d, lanes.gaps.data() + to);
    }
  }

 private:
  using Values = std::vector<double>;
  static std::size_t width() { return hn::Lanes(PanelTag()); }
  HWY_INLINE V load(const Values& values, std::size_t i) const {
    return hn::LoadU(PanelTag(), values.data() + i * width());
  }
  HWY_INLINE void keep(V v, Values& values, std::size_t i) const {
    hn::StoreU(v, PanelTag(), values.data() + i * width());
  }
  HWY_INLINE V log_spot(std::size_t i) const {
    return number(plan_.sign * plan_.spacing * (double(i) - double(plan_.at_strike))) * s_;
  }
  HWY_INLINE V signed_by_side(V v) const { return number(plan_.sign) * v; }

  void begin() {
    for (std::size_t i = 0; i < plan_.points; ++i) {
      const auto x = log_spot(i);
      const auto weight = exponential(hn::Neg(alpha_ * x));
      keep(weight, weight_, i);
      if (i < plan_.at_strike) continue;
      auto payoff = signed_by_side(exponential(x) - number(1.0)) * weight;
      if (i == plan_.at_strike) payoff = number(0.0);
      keep(payoff, exercise_, i);
      // What sampling takes off the kink at the strike, to fourth order.
      if (i == plan_.at_strike) payoff = number(plan_.spacing / 12) * s_;
      keep(payoff, american_, i);
      keep(payoff, european_, i);
    }
    claims_.push_back({1, 0, 1});
  }

  // Of the claim at a spot, at its least 0 where nothing is left of the spot.
  HWY_INLINE V worth(const Claim& claim, V spot) const {
    auto held = number(claim.spot) * spot - number(claim.paid) * per_strike_;
    if (plan_.sign < 0) held = hn::Max(held, number(0.0));
    return hn::Max(signed_by_side(held - number(claim.strike)), number(0.0));
  }
  HWY_INLINE V best(V spot) const {
    auto most = signed_by_side(spot - number(1.0));
    for (const Claim& claim : claims_) most = hn::Max(most, worth(claim, spot));
    return most;
  }
  HWY_INLINE V black_far(V spot) const {
    return signed_by_side(number(forward_) * spot - number(claims_[0].strike));
  }

  void age(double length) {
    age_ += length;
    const double by_rate = std::exp(-plan_.rate * length),
                 by_yield = std::exp(-plan_.yield * length);
    for (Claim& claim : claims_) {
      claim.spot *= by_yield;
      claim.paid *= by_rate;
      claim.strike *= by_rate;
    }
    forward_ *= by_yield;
  }

  void go_back(const Step& step) {
    const std::size_t last = plan_.points - 1;
    const auto p = number(step.p), q = number(step.q), rho = number(step.rho);
    auto ya = number(0.0), ye = ya, yc = ya;
    auto a0 = load(american_, 0), a1 = load(american_, 1);
    auto e0 = load(european_, 0), e1 = load(european_, 1);
    auto c0 = load(correction_, 0), c1 = load(correction_, 1);
    for (std::size_t i = 1; i < last; ++i) {
      const auto a2 = load(american_, i + 1), e2 = load(european_, i + 1),
                 c2 = load(correction_, i + 1);
      ya = (p * a1 + q * (a0 + a2)) + rho * ya;
      ye = (p * e1 + q * (e0 + e2)) + rho * ye;
      yc = (p * c1 + q * (c0 + c2)) + rho * yc;
      keep(ya, american_, i);
      keep(ye, european_, i);
      keep(yc, correction_, i);
      a0 = a1, a1 = a2, e0 = e1, e1 = e2, c0 = c1, c1 = c2;
    }
    age(step.length);
    const auto now = exponential(hn::Neg(beta_ * number(age_)));
    const auto spot = exponential(log_spot(last)), scale = load(weight_, last) * now;
    const auto held = worth(claims_[0], spot);
    auto a = best(spot) * scale, e = held * scale, c = (held - black_far(spot)) * scale;
    keep(a, american_, last);
    keep(e, european_, last);
    keep(c, correction_, last);
    for (std::size_t i = last; i-- > 1;) {
      a = load(american_, i) + rho * a;
      e = load(european_, i) + rho * e;
      c = load(correction_, i) + rho * c;
      if (plan_.any_time) a = hn::Max(a, load(exercise_, i) * now);
      keep(a, american_, i);
      keep(e, european_, i);
      keep(c, correction_, i);
    }
  }

  // Black's price with the dividends gone by as shares.
  HWY_INLINE V black(V x) const {
    const double root = std::sqrt(age_);
    const auto deviation = s_ * number(root);
    const double carry = std::log(forward_) + plan_.rate * age_;
    const auto d1 = (x + number(carry)) / deviation + number(0.5) * deviation;
    const auto d2 = d1 - deviation;
    const auto z1 = signed_by_side(d1), z2 = signed_by_side(d2);
    return signed_by_side(number(forward_) * exponential(x) * cumulative(z1, density(z1)) -
                          number(claims_[0].strike) * cumulative(z2, density(z2)));
  }

  // Black's price at `to` less that at `from`: the integral of its slope, by Gauss's two points
  // where they are near each other on its scale (the next term is below 1e-7 of the change).
  HWY_INLINE V black_change(V from, V to) const {
    const PanelTag d;
    const double root = std::sqrt(age_), carry = std::log(forward_) + plan_.rate * age_;
    const auto deviation = s_ * number(root);
    const auto half = number(0.5) * (to - from);
    if (!hn::AllTrue(d, hn::Abs(half) <= number(0.15) * deviation)) return black(to) - black(from);
    const auto middle = from + half, apart = half * number(0.57735026918962576);
    const auto slope = [&](V x) HWY_ATTR {
      const auto z = signed_by_side((x + number(carry)) / deviation + number(0.5) * deviation);
      return exponential(x) * cumulative(z, density(z));
    };
    return number(plan_.sign * forward_) * half * (slope(middle - apart) + slope(middle + apart));
  }

  void go_ex(const PanelDividend& dividend) {
    const PanelTag d;
    const hn::RebindToSigned<PanelTag> di;
    const std::size_t last = plan_.points - 1;
    const bool is_cash = dividend.kind == DividendKind::cash;
    const auto now = exponential(hn::Neg(beta_ * number(age_)));
    const auto per_step = number(plan_.sign / plan_.spacing) / s_;
    const auto amount = number(dividend.amount) * (is_cash ? per_strike_ : number(1.0));
    const double log_kept = std::log1p(-dividend.share);
    if (plan_.sign < 0) claims_.push_back({1, 0, 1});
    for (std::size_t i = 0; i <= last; ++i) {
      const auto x = log_spot(i);
      const auto weight = load(weight_, i) * now;
      auto ratio = number(1.0) - (is_cash ? amount * exponential(hn::Neg(x)) : amount);
      if (plan_.survivor) ratio = hn::IfThenElse(ratio < number(0.0), number(1.0), ratio);
      ratio = hn::Max(ratio, number(1e-30));
      const auto fall = log(d, ratio);
      const auto after = x + fall;
      const auto raw = number(double(plan_.at_strike)) + after * per_step;
      const auto at = hn::Min(hn::Max(raw, number(0.0)), number(double(last)));
      const auto floor = hn::Min(hn::Max(hn::Floor(at), number(1.0)), number(double(last) - 2));
      const auto index =
          hn::ConvertTo(di, (floor - number(1.0)) * number(double(width()))) + hn::Iota(di, 0);
      const auto t = at - floor;
      const auto tm = t - number(1.0), t2 = t - number(2.0), tp = t + number(1.0);
      const auto grown = exponential(alpha_ * fall);
      const auto w0 = hn::Neg(t * tm * t2) * number(1.0 / 6) * grown,
                 w1 = tp * tm * t2 * number(0.5) * grown,
                 w2 = hn::Neg(tp * t * t2) * number(0.5) * grown,
                 w3 = tp * t * tm * number(1.0 / 6) * grown;
      const auto interpolated = [&](const Values& values) HWY_ATTR {
        const double* base = values.data();
        return (w0 * hn::GatherIndex(d, base, index) +
                w1 * hn::GatherIndex(d, base + width(), index)) +
               (w2 * hn::GatherIndex(d, base + 2 * width(), index) +
                w3 * hn::GatherIndex(d, base + 3 * width(), index));
      };
      auto a = interpolated(american_), e = interpolated(european_), c = interpolated(correction_);
      const auto out = raw<number(0.0), in = raw> number(double(last));
      a = hn::IfThenZeroElse(out, a);
      e = hn::IfThenZeroElse(out, e);
      c = hn::IfThenZeroElse(out, c);
      if (!hn::AllFalse(d, in)) {
        const auto spot = exponential(after);
        const auto held = worth(claims_[0], spot);
        a = hn::IfThenElse(in, best(spot) * weight, a);
        e = hn::IfThenElse(in, held * weight, e);
        c = hn::IfThenElse(in, (held - black_far(spot)) * weight, c);
      }
      if (is_cash && plan_.with_correction)
        c = c + black_change(x + number(log_kept), after) * weight;
      keep(a, next_a_, i);
      keep(e, next_e_, i);
      keep(c, next_c_, i);
    }
    american_.swap(next_a_);
    european_.swap(next_e_);
    correction_.swap(next_c_);
    for (Claim& claim : claims_) {
      if (is_cash)
        claim.paid += claim.spot * dividend.amount;
      else
        claim.spot *= 1 - dividend.amount;
    }
    forward_ *= 1 - dividend.share;
    if (plan_.sign > 0) claims_.push_back({1, 0, 1});
    exercise_before(now);
  }

  // Exercise just before a dividend, and what sampling takes off the kink.
  void exercise_before(V now) {
    auto gain = hn::Neg(load(american_, 0)), spill = number(0.0);
    for (std::size_t i = 0; i < plan_.points; ++i) {
      const auto held = load(american_, i);
      auto next = number(-1.0);
      if (i + 1 < plan_.points) next = load(exercise_, i + 1) * now - load(american_, i + 1);
      const auto crossed = hn::And(gain <= number(0.0), next > number(0.0));
      const auto jump = next - gain;
      const auto t = hn::Neg(gain) / jump;
      const auto mass = hn::IfThenElseZero(
          crossed, jump * (number(1.0 / 12) - number(0.5) * t * (number(1.0) - t)));
      auto value = (held + hn::Max(gain, number(0.0))) + spill;
      if (plan_.sign > 0) value = value + mass * (number(1.0) - t_or_zero(crossed, t));
      spill = plan_.sign > 0 ? mass * t_or_zero(crossed, t) : number(0.0);
      keep(value, american_, i);
      gain = next;
    }
  }
  HWY_INLINE V t_or_zero(hn::Mask<PanelTag> mask, V t) const { return hn::IfThenElseZero(mask, t); }

  const GridPlan& plan_;
  V s_, per_strike_, alpha_, beta_;
  Values american_, european_, correction_, exercise_, weight_, next_a_, next_e_, next_c_;
  std::vector<Claim> claims_;  // the European first
  double forward_ = 1, age_ = 0;
};

void grid_lanes(const GridPlan& plan, GridLanes& lanes) {
  const PanelTag d;
  for (std::size_t at = 0; at < lanes.lanes; at += hn::Lanes(d)) {
    GridBlock block(plan, hn::LoadU(d, lanes.total_vols.data() + at),
                    hn::LoadU(d, lanes.per_strike.data() + at));
    block.run();
    block.store(lanes, at);
  }
}

}  // namespace HWY_NAMESPACE
}  // namespace duskgrid::pricing
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace duskgrid::pricing {
namespace {

HWY_EXPORT(grid_lanes);

using std::numbers::pi;

Step step_of(double length, double implicit, double spacing) {
  const double mu = length / (2 * spacing * spacing);
  // Fourth order where the matrix keeps its signs, which the constraint needs.
  const double order = implicit * mu > 1.0 / 6 ? 1.0 / 12 : 0.0;
  const double g = implicit * mu - order, e = (1 - implicit) * mu + order;
  const double half = 1 / (2 * g);
  const double rho = 1 / (1 + half + std::sqrt(half * (2 + half)));
  const double per = rho / g;
  return {length, (1 - 2 * e) * per, e * per, rho};
}

std::vector<Step> interval_of(double length, std::size_t steps, double spacing) {
  constexpr std::size_t kDamped = 2;
  std::vector<Step> out;
  const double count = double(steps);
  for (std::size_t j = 0; j < steps; ++j) {
    const double dt = length * (2 * double(j) + 1) / (count * count);
    if (j < kDamped) {
      out.push_back(step_of(0.5 * dt, 1.0, spacing));
      out.push_back(step_of(0.5 * dt, 1.0, spacing));
    } else {
      out.push_back(step_of(dt, 0.5, spacing));
    }
  }
  return out;
}

// `coarse` is 1 or 2: the grid with every second point and step.
GridPlan plan_of(const DividendProblem& problem, double low, const DividendPanelOptions& options,
                 std::size_t coarse) {
  constexpr double kReach = 5.5;  // what starts farther from the strike is worth less than 1e-8
  double moved = std::abs(problem.rate - problem.yield);
  for (const PanelDividend& p : problem.dividends) moved -= std::log1p(-p.share);
  const double reach = kReach + moved / low;
  const auto half = 2 / coarse * static_cast<std::size_t>(std::ceil(0.5 * reach / options.spacing));
  const double spacing = options.spacing * double(coarse);
  GridPlan plan{
      problem.put_call == quotes::PutCall::call ? 1.0 : -1.0,
      problem.rate,
      problem.yield,
      spacing,
      2 * half + 1,
      half,
      exercise_kind(problem.put_call, problem.rate, problem.yield) == ExerciseKind::one_side,
      problem.shortfall == Shortfall::survivor,
      coarse == 1,
      {},
      problem.dividends};
  double left = 1;
  const auto back_to = [&](double time) {
    const double length = left - time;
    const auto wanted =
        static_cast<std::size_t>(std::ceil(0.5 * double(options.steps) * std::sqrt(length)));
    const std::size_t steps = 2 / coarse * std::max(options.least_steps / 2, wanted);
    plan.intervals.push_back(length > 0 ? interval_of(length, steps, spacing)
                                        : std::vector<Step>{});
    left = time;
  };
  for (const PanelDividend& p : problem.dividends) back_to(p.time);
  back_to(0);
  return plan;
}

std::vector<double> chebyshev_points(double low, double high, std::size_t count) {
  std::vector<double> out;
  for (std::size_t k = 0; k < count; ++k)
    out.push_back(0.5 * (low + high) -
                  0.5 * (high - low) * std::cos(pi * (double(k) + 0.5) / double(count)));
  return out;
}

void lagrange(const std::vector<double>& points, double at, double* weights) {
  for (std::size_t i = 0; i < points.size(); ++i) {
    weights[i] = 1;
    for (std::size_t j = 0; j < points.size(); ++j)
      if (j != i) weights[i] *= (at - points[j]) / (points[i] - points[j]);
  }
}

void cubic_weights(double t, double* w) {
  w[0] = -t * (t - 1) * (t - 2) / 6;
  w[1] = (t + 1) * (t - 1) * (t - 2) / 2;
  w[2] = -(t + 1) * t * (t - 2) / 2;
  w[3] = (t + 1) * t * (t - 1) / 6;
}

// Where in points the boundary is, from two gaps that grow as the square of the distance; points
// - 1 where there is none.
double boundary_of(const GridPlan& plan, const GridLanes& lanes, std::size_t lane) {
  const auto gap = [&](std::size_t i) { return lanes.gaps[i * lanes.lanes + lane]; };
  constexpr double kNothing = 1e-13;
  std::size_t i = plan.at_strike;
  while (i + 1 < plan.points && gap(i) > kNothing) ++i;
  if (i + 2 >= plan.points || i < plan.at_strike + 3) return double(plan.points - 1);
  const double near = std::sqrt(gap(i - 1)), far = std::sqrt(gap(i - 2));
  return double(i - 1) + std::clamp(near / (far - near), 0.0, 1.0);
}

// The largest of the last Chebyshev coefficients over either variable: what interpolation between
// the nodes leaves.
double last_coefficient(const std::vector<double>& lanes, std::size_t strikes, std::size_t vols) {
  const auto last = [&](std::size_t first, std::size_t stride, std::size_t count) {
    double sum = 0;
    for (std::size_t k = 0; k < count; ++k)
      sum += lanes[first + k * stride] *
             std::cos(double(count - 1) * pi * (double(k) + 0.5) / double(count));
    return count > 1 ? std::abs(sum) * 2 / double(count) : 0.0;
  };
  double most = 0;
  for (std::size_t j = 0; j < strikes; ++j) most = std::max(most, last(j * vols, 1, vols));
  for (std::size_t k = 0; k < vols; ++k) most = std::max(most, last(k, vols, strikes));
  return most;
}

void solve(const GridPlan& plan, GridLanes& lanes) {
  for (auto* values : {&lanes.premiums, &lanes.corrections, &lanes.gaps})
    values->resize(plan.points * lanes.lanes);
  HWY_DYNAMIC_DISPATCH(grid_lanes)(plan, lanes);
}

// Values on a grid, and on that with every second point and step, to the limit of second order.
void extrapolate(const std::vector<double>& coarse, std::size_t n, std::vector<double>& fine) {
  std::vector<double> change(coarse.size());
  const std::size_t last = coarse.size() / n - 1;
  for (std::size_t i = 0; i <= last; ++i)
    for (std::size_t lane = 0; lane < n; ++lane)
      change[i * n + lane] = (fine[2 * i * n + lane] - coarse[i * n + lane]) / 3;
  for (std::size_t i = 0; i <= last; ++i)
    for (std::size_t lane = 0; lane < n; ++lane) {
      const double here = change[i * n + lane];
      fine[2 * i * n + lane] += here;
      if (i == last) continue;
      const double next = change[(i + 1) * n + lane];
      const double before = i > 0 ? change[(i - 1) * n + lane] : 2 * here - next;
      const double after = i + 1 < last ? change[(i + 2) * n + lane] : 2 * next - here;
      fine[(2 * i + 1) * n + lane] += (9 * (here + next) - before - after) / 16;
    }
}

}  // namespace

DividendPanel make_dividend_panel(const DividendProblem& problem, double low, double high,
                                  double low_strike, double high_strike,
                                  const DividendPanelOptions& options) {
  const bool with_cash = std::any_of(problem.dividends.begin(), problem.dividends.end(),
                                     [](const auto& p) { return p.kind == DividendKind::cash; });
  DividendPanel out;
  out.low = low, out.high = high, out.low_strike = low_strike, out.high_strike = high_strike;
  out.strikes = with_cash ? options.strikes : 1;
  out.vols = with_cash ? options.vols : 8;
  out.strike_points = chebyshev_points(1 / high_strike, 1 / low_strike, out.strikes);
  out.vol_points = chebyshev_points(std::log(low), std::log(high), out.vols);
  const GridPlan plan = plan_of(problem, low, options, 1);
  const std::size_t n = out.strikes * out.vols;
  GridLanes lanes{n, {}, {}, {}, {}, {}};
  for (const double per_strike : out.strike_points)
    for (const double vol : out.vol_points) {
      lanes.total_vols.push_back(std::exp(vol));
      lanes.per_strike.push_back(per_strike);
    }
  GridLanes coarse = lanes;
  solve(plan, lanes);
  const GridPlan coarse_plan = plan_of(problem, low, options, 2);
  solve(coarse_plan, coarse);
  extrapolate(coarse.premiums, n, lanes.premiums);

  std::vector<double> boundaries(n, double(plan.points - 1));
  if (plan.any_time)
    for (std::size_t lane = 0; lane < n; ++lane) boundaries[lane] = boundary_of(plan, lanes, lane);
  out.bounded = std::all_of(boundaries.begin(), boundaries.end(),
                            [&](double b) { return b < double(plan.points - 1); });
  // A boundary that moves much or suddenly between nodes, far out or about to vanish before a
  // dividend, would bend the rows around the strike.
  const double smooth = 0.01 / plan.spacing;
  const double narrow = 0.25 / plan.spacing;
  const auto [least, most] = std::minmax_element(boundaries.begin(), boundaries.end());
  if (*most - *least > narrow || last_coefficient(boundaries, out.strikes, out.vols) > smooth)
    out.bounded = false;
  out.sure = *least;
  if (!out.bounded) boundaries.assign(n, double(plan.points - 1));
  out.spacing = plan.spacing;
  out.rows =
      static_cast<std::size_t>(std::floor(*std::min_element(boundaries.begin(), boundaries.end())));
  out.premium.resize(out.rows * n);
  for (std::size_t lane = 0; lane < n; ++lane) {
    const double boundary = boundaries[lane];
    out.starts.push_back(boundary);
    const double last = std::ceil(boundary) - 1;  // the last that is not exercised
    for (std::size_t row = 0; row < out.rows; ++row) {
      const double at = boundary - double(row);
      const double first = std::clamp(std::floor(at), 1.0, std::max(1.0, last - 2));
      double w[4], premium = 0;
      cubic_weights(at - first, w);
      for (std::size_t k = 0; k < 4; ++k)
        premium += w[k] * lanes.premiums[(static_cast<std::size_t>(first) - 1 + k) * n + lane];
      out.premium[row * n + lane] = premium;
    }
  }
  out.points = plan.points;
  out.at_strike = double(plan.at_strike);
  out.correction = std::move(lanes.corrections);
  return out;
}

StrikeWeights strike_weights(const DividendPanel& panel, double strike) {
  StrikeWeights out{};
  lagrange(panel.strike_points, 1 / strike, out.data());
  return out;
}

namespace {

// Cubic over the rows of a table, weighted over its lanes.
double tabled(const std::vector<double>& table, std::size_t rows, std::size_t n,
              const double* weights, double at) {
  const double held = std::clamp(at, 0.0, double(rows - 1));
  const double first = std::clamp(std::floor(held), 1.0, double(rows) - 3);
  double w[4], sum = 0;
  cubic_weights(held - first, w);
  const double* row = table.data() + (static_cast<std::size_t>(first) - 1) * n;
  for (std::size_t lane = 0; lane < n; ++lane)
    sum += weights[lane] * ((w[0] * row[lane] + w[1] * row[n + lane]) +
                            (w[2] * row[2 * n + lane] + w[3] * row[3 * n + lane]));
  return sum;
}

}  // namespace

DividendExcess excess_at(const DividendPanel& panel, const StrikeWeights& by_strike, bool is_put,
                         double log_spot, double s) {
  std::array<double, kMostNodes> by_vol;
  std::array<double, kMostNodes * kMostNodes> weights;
  lagrange(panel.vol_points, std::log(s), by_vol.data());
  const std::size_t n = panel.strikes * panel.vols;
  double start = 0;
  for (std::size_t j = 0; j < panel.strikes; ++j)
    for (std::size_t k = 0; k < panel.vols; ++k) {
      const std::size_t lane = j * panel.vols + k;
      weights[lane] = by_strike[j] * by_vol[k];
      start += weights[lane] * panel.starts[lane];
    }
  const double at = panel.at_strike + (is_put ? -log_spot : log_spot) / (s * panel.spacing);
  DividendExcess out{0, 0, panel.bounded && at >= start, panel.bounded || at < panel.sure - 1};
  if (out.exercised) return out;
  out.premium = tabled(panel.premium, panel.rows, n, weights.data(), start - at);
  out.correction = tabled(panel.correction, panel.points, n, weights.data(), at);
  return out;
}

}  // namespace duskgrid::pricing
#endif  // HWY_ONCE
