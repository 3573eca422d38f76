#include "pricing/american_panel.h"

#include <algorithm>
#include <cmath>
#include <numbers>

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "pricing/american_panel.cc"
#include <hwy/foreach_target.h>
// After foreach_target, which compiles this file once a target.
#include <hwy/highway.h>

#include "pricing/american_kernel-inl.h"

#ifndef DUSKGRID_PRICING_AMERICAN_PANEL_ONCE
#define DUSKGRID_PRICING_AMERICAN_PANEL_ONCE
namespace duskgrid::pricing {
namespace {

// What all lanes share. rate_decay[k] = weight e^{-r v}, yield_decay[k] = weight e^{-q v}.
struct SharedTerms {
  double rate, yield, log_limit;
  const CollocationRule* collocation;
  const AgeRule* premium;
  const double* rate_decay;
  const double* yield_decay;
  const double* premium_rate_decay;
  const double* premium_yield_decay;
};

constexpr std::size_t kN = PanelMaker::kNodes, kL = PanelMaker::kPoints,
                      kP = PanelMaker::kPremiumPoints;

// total_vols and depths (of the perpetual boundary below the limit) in; the rest out.
struct LaneColumns {
  std::array<double, kPanelVols> total_vols, depths, log_boundaries, moves;
  std::array<double, kPanelSpots> distances;
  std::array<double, kPanelSpots * kPanelVols> premiums;  // row a distance
};

}  // namespace
}  // namespace duskgrid::pricing
#endif

HWY_BEFORE_NAMESPACE();
namespace duskgrid::pricing {
namespace HWY_NAMESPACE {

static_assert(kPanelVols == 8);

// BoundaryEquations of american.cc for a lane each, and Newton's steps on them.
class LaneBoundaries {
 public:
  LaneBoundaries(const SharedTerms& shared, V total_vol, V depth)
      : shared_(shared), s_(total_vol), inverse_s_(number(1.0) / total_vol) {
    for (std::size_t i = 0; i < kN; ++i) {
      const auto fall = number(1.5 * shared.collocation->root[i]) * s_;
      beta_[i] = depth * (exponential(hn::Neg(fall) / depth) - number(1.0));
    }
  }

  // Lanes that have settled stay as they are, whatever their neighbours still need.
  void solve() {
    constexpr int kSteps = 12;
    const PanelTag d;
    auto moving = s_ > number(0.0);
    move_ = number(0.0);
    for (int step = 0; step < kSteps && !hn::AllFalse(d, moving); ++step) moving = improve(moving);
  }

  V beta(std::size_t i) const { return beta_[i]; }
  V move() const { return move_; }

  // beta at a row of an age rule, and whether it is interpolated there (else held at a floor).
  HWY_INLINE V beta_at(const double* row, double left, hn::Mask<PanelTag>& interpolated) const {
    auto even = number(row[0]) * squares_[0], odd = number(row[1]) * squares_[1];
    for (std::size_t j = 2; j < kN; j += 2) {
      even = even + number(row[j]) * squares_[j];
      odd = odd + number(row[j + 1]) * squares_[j + 1];
    }
    const double share = std::min(1.0, left / shared_.collocation->root[kN - 1]);
    const auto floor = hn::Max(number(0.05 * share * share) * squares_[kN - 1], number(1e-300));
    const auto square = even + odd;
    interpolated = square > floor;
    return hn::Neg(hn::Sqrt(hn::IfThenElse(interpolated, square, floor)));
  }

  void square() {
    for (std::size_t j = 0; j < kN; ++j) squares_[j] = beta_[j] * beta_[j];
  }

 private:
  static_assert(kN % 2 == 0);

  // Returns which lanes still move.
  hn::Mask<PanelTag> improve(hn::Mask<PanelTag> moving) {
    square();
    for (std::size_t i = 0; i < kN; ++i) equation(i);
    eliminate();
    auto most = number(0.0);
    for (std::size_t i = 0; i < kN; ++i) {
      const auto low = beta_[i] + beta_[i], high = number(0.5) * beta_[i];
      const auto moved = hn::Min(hn::Max(beta_[i] - residual_[i], low), high);
      const auto size = hn::Abs(moved - beta_[i]) / (hn::Abs(beta_[i]) + number(0.01) * s_);
      most = hn::Max(most, size);
      beta_[i] = hn::IfThenElse(moving, moved, beta_[i]);
    }
    move_ = hn::IfThenElse(moving, most, move_);
    constexpr double kSettled = 1e-5;  // the next step would move by its square
    return hn::And(moving, most > number(kSettled));
  }

  void equation(std::size_t i) {
    const double root = shared_.collocation->root[i], carry = shared_.rate - shared_.yield;
    const AgeRule& ages = shared_.collocation->ages;
    const bool with_yield = shared_.yield != 0;
    const auto b = beta_[i];
    const auto level = exponential(b + number(shared_.log_limit));
    const auto inverse_level = number(1.0) / level;
    auto a = number(0.0), a_slope = a, m = a, m_slope = a;
    V by_a[kN], by_m[kN];
    for (std::size_t j = 0; j < kN; ++j) by_a[j] = by_m[j] = a;
    for (std::size_t k = i * kL; k < (i + 1) * kL; ++k) {
      const double* row = ages.interpolation.data() + k * kN;
      hn::Mask<PanelTag> interpolated;
      const auto other = beta_at(row, ages.root_left[k], interpolated);
      const double age = ages.root_age[k];
      const auto deviation = s_ * number(age);
      const auto inverse = inverse_s_ * number(1.0 / age);
      const auto d2 = (b - other + number(carry * age * age)) * inverse - number(0.5) * deviation;
      const auto n2 = density(d2) * inverse_s_ * number(shared_.rate_decay[k]);
      auto earned = number(0.0), m_term = earned;
      if (with_yield) {
        const auto level_then = exponential(other + number(shared_.log_limit));
        earned = number(shared_.yield) * level_then;
        const auto d1 = d2 + deviation;
        const auto n1 = density(d1);
        m = m + number(shared_.yield_decay[k] * age) * cumulative(d1, n1);
        m_term = number(shared_.yield_decay[k]) * n1 * inverse_s_;
        m_slope = m_slope + m_term;
      }
      const auto term = n2 * (number(shared_.rate) - earned);
      const auto bent = term * d2 * inverse;
      a = a + term;
      a_slope = a_slope - bent;
      const auto per = number(1.0) / other;
      const auto of_a = hn::IfThenElseZero(interpolated, (bent - n2 * earned) * per);
      for (std::size_t j = 0; j < kN; ++j) by_a[j] = by_a[j] + of_a * number(row[j]);
      if (with_yield) {
        const auto of_m = hn::IfThenElseZero(interpolated, m_term * per);
        for (std::size_t j = 0; j < kN; ++j) by_m[j] = by_m[j] - of_m * number(row[j]);
      }
    }
    const auto deviation = s_ * number(root);
    const auto d1 =
        (b + number(shared_.log_limit + carry * root * root)) / deviation + number(0.5) * deviation;
    const double decay = std::exp(-shared_.yield * root * root);
    const auto gains = number(std::max(shared_.yield, 0.0)),
               costs = number(std::max(-shared_.yield, 0.0));
    const auto n1 = number(decay) * density(d1);
    const auto left = a * inverse_level + costs * m;
    const auto right = number(decay) * cumulative(d1, density(d1)) + gains * m;
    const auto per_left = number(1.0) / left, per_right = number(1.0) / right;
    V* const row = jacobian_ + i * kN;
    for (std::size_t j = 0; j < kN; ++j)
      row[j] = beta_[j] * ((by_a[j] * inverse_level + costs * by_m[j]) * per_left -
                           gains * by_m[j] * per_right);
    row[i] = row[i] + ((a_slope - a) * inverse_level + costs * m_slope) * per_left -
             (n1 / deviation + gains * m_slope) * per_right;
    residual_[i] = log(PanelTag(), hn::Max(left * per_right, number(1e-300)));
  }

  void eliminate() {
    for (std::size_t c = 0; c < kN; ++c) {
      const auto inverse = number(1.0) / jacobian_[c * kN + c];
      for (std::size_t r = c + 1; r < kN; ++r) {
        const auto factor = jacobian_[r * kN + c] * inverse;
        for (std::size_t k = c + 1; k < kN; ++k)
          jacobian_[r * kN + k] = jacobian_[r * kN + k] - factor * jacobian_[c * kN + k];
        residual_[r] = residual_[r] - factor * residual_[c];
      }
    }
    for (std::size_t r = kN; r-- > 0;) {
      for (std::size_t k = r + 1; k < kN; ++k)
        residual_[r] = residual_[r] - jacobian_[r * kN + k] * residual_[k];
      residual_[r] = residual_[r] / jacobian_[r * kN + r];
    }
  }

  const SharedTerms& shared_;
  V s_, inverse_s_, move_;
  V beta_[kN], squares_[kN], residual_[kN], jacobian_[kN * kN];
};

// The premiums at distances (in total volatilities) above the boundary.
void premiums(const SharedTerms& shared, const LaneBoundaries& boundaries, V s, std::size_t at,
              LaneColumns& columns) {
  const PanelTag d;
  const AgeRule& rule = *shared.premium;
  const double carry = shared.rate - shared.yield;
  const auto inverse_s = number(1.0) / s;
  V beta[kP], level[kP];
  for (std::size_t k = 0; k < kP; ++k) {
    hn::Mask<PanelTag> interpolated;
    beta[k] =
        boundaries.beta_at(rule.interpolation.data() + k * kN, rule.root_left[k], interpolated);
    level[k] = exponential(beta[k] + number(shared.log_limit));
  }
  for (std::size_t y = 0; y < kPanelSpots; ++y) {
    const auto above = boundaries.beta(0) + number(columns.distances[y]) * s;  // of ln X
    const auto spot = exponential(above + number(shared.log_limit));
    auto sum = number(0.0);
    for (std::size_t k = 0; k < kP; ++k) {
      const double age = rule.root_age[k];
      const auto deviation = s * number(age);
      const auto d2 =
          (above - beta[k] + number(carry * age * age)) * (inverse_s * number(1 / age)) -
          number(0.5) * deviation;
      const auto n2 = density(d2);
      auto earned =
          number(shared.rate * shared.premium_rate_decay[k]) * cumulative(hn::Neg(d2), n2);
      if (shared.yield != 0) {
        const auto d1 = d2 + deviation;
        earned = earned - number(shared.yield * shared.premium_yield_decay[k]) * spot *
                              cumulative(hn::Neg(d1), density(d1));
      }
      sum = sum + number(age) * earned;
    }
    hn::StoreU(sum, d, columns.premiums.data() + y * kPanelVols + at);
  }
}

void panel_lanes(const SharedTerms& shared, LaneColumns& columns) {
  const PanelTag d;
  for (std::size_t at = 0; at < kPanelVols; at += hn::Lanes(d)) {
    const auto s = hn::LoadU(d, columns.total_vols.data() + at);
    LaneBoundaries boundaries(shared, s, hn::LoadU(d, columns.depths.data() + at));
    boundaries.solve();
    boundaries.square();
    hn::StoreU(boundaries.beta(0) + number(shared.log_limit), d,
               columns.log_boundaries.data() + at);
    hn::StoreU(boundaries.move(), d, columns.moves.data() + at);
    premiums(shared, boundaries, s, at, columns);
  }
}

}  // namespace HWY_NAMESPACE
}  // namespace duskgrid::pricing
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace duskgrid::pricing {
namespace {

HWY_EXPORT(panel_lanes);

using std::numbers::pi;

// Depth of the perpetual boundary below the limit (american.cc), within what exp can tell.
double perpetual_depth(double rate, double yield, double log_limit, double s) {
  const double a = 0.5 - (rate - yield) / (s * s);
  const double root = std::sqrt(a * a + 2 * rate / (s * s));
  const double power = a > 0 ? -2 * rate / (s * s) / (a + root) : a - root;
  return std::clamp(log_limit + std::log1p(-1 / power), 1e-6, 1e6);
}

template <std::size_t kCount>
void chebyshev(std::array<double, kCount>& points, std::array<double, kCount * kCount>& transform) {
  const double n = static_cast<double>(kCount);
  for (std::size_t k = 0; k < kCount; ++k) {
    const double angle = pi * (static_cast<double>(k) + 0.5) / n;
    points[k] = std::cos(angle);
    for (std::size_t m = 0; m < kCount; ++m)
      transform[m * kCount + k] =
          (m == 0 ? 1.0 : 2.0) / n * std::cos(static_cast<double>(m) * angle);
  }
}

std::vector<double> decayed(const AgeRule& rule, double rate) {
  std::vector<double> out(rule.weight);
  for (std::size_t k = 0; k < out.size(); ++k)
    out[k] *= std::exp(-rate * rule.root_age[k] * rule.root_age[k]);
  return out;
}

// T_0 .. T_{n-1} at c and their derivatives.
template <std::size_t kCount>
void chebyshev_values(double c, double* values, double* slopes) {
  values[0] = 1, values[1] = c, slopes[0] = 0, slopes[1] = 1;
  for (std::size_t m = 2; m < kCount; ++m) {
    values[m] = 2 * c * values[m - 1] - values[m - 2];
    slopes[m] = 2 * values[m - 1] + 2 * c * slopes[m - 1] - slopes[m - 2];
  }
}

}  // namespace

PanelPremium premium_at(const PremiumPanel& panel, double log_spot, double s) {
  const double log_low = std::log(panel.low), log_high = std::log(panel.high);
  const double per = 2 / (log_high - log_low);
  const double c = (std::log(s) - log_low) * per - 1;
  double t[kPanelVols], dt[kPanelVols];
  chebyshev_values<kPanelVols>(c, t, dt);
  double log_boundary = 0, boundary_slope = 0;
  for (std::size_t j = 0; j < kPanelVols; ++j) {
    log_boundary += t[j] * panel.log_boundary[j];
    boundary_slope += dt[j] * panel.log_boundary[j];
  }
  const double y = (log_spot - log_boundary) / s;
  if (!(y > 0)) return {0, 0, 0, true};
  if (y > kPanelReach) return {0, 0, 0, false};
  const double c_slope = per / s, y_slope = -boundary_slope * c_slope / s - y / s;
  double u[kPanelSpots], du[kPanelSpots];
  chebyshev_values<kPanelSpots>(2 * y / kPanelReach - 1, u, du);
  double value = 0, by_c = 0, by_y = 0, before_last = 0, last_vols = 0, last_spots = 0;
  for (std::size_t m = 0; m < kPanelSpots; ++m) {
    const double* row = panel.log_premium.data() + m * kPanelVols;
    double sum = 0, slope = 0;
    for (std::size_t j = 0; j < kPanelVols; ++j) {
      sum += t[j] * row[j];
      slope += dt[j] * row[j];
    }
    value += u[m] * sum;
    by_c += u[m] * slope;
    by_y += du[m] * sum;
    before_last += u[m] * row[kPanelVols - 2];
    last_vols += u[m] * row[kPanelVols - 1];
    if (m + 1 == kPanelSpots) last_spots = sum;
  }
  const double premium = std::exp(value);
  return {premium, premium * (by_c * c_slope + by_y * (2 / kPanelReach) * y_slope),
          premium * (std::abs(before_last) + std::abs(last_vols) + std::abs(last_spots)), false};
}

PanelMaker::PanelMaker()
    : collocation_(collocation_rule(kNodes, kPoints)),
      premium_(premium_rule(kNodes, kPremiumPoints)) {
  chebyshev<kPanelVols>(vol_points_, vol_transform_);
  chebyshev<kPanelSpots>(spot_points_, spot_transform_);
}

PremiumPanel PanelMaker::make(double rate, double yield, double low, double high) const {
  PremiumPanel out;
  out.low = low;
  out.high = high;
  LaneColumns columns;
  const double middle = 0.5 * (std::log(low) + std::log(high));
  const double half = 0.5 * (std::log(high) - std::log(low));
  const double limit = yield > rate ? std::log(rate / yield) : 0.0;
  for (std::size_t j = 0; j < kPanelVols; ++j) {
    columns.total_vols[j] = std::exp(middle + half * vol_points_[j]);
    columns.depths[j] = perpetual_depth(rate, yield, limit, columns.total_vols[j]);
  }
  for (std::size_t y = 0; y < kPanelSpots; ++y)
    columns.distances[y] = 0.5 * kPanelReach * (1 + spot_points_[y]);
  const auto by_rate = decayed(collocation_.ages, rate),
             by_yield = decayed(collocation_.ages, yield);
  const auto premium_by_rate = decayed(premium_, rate), premium_by_yield = decayed(premium_, yield);
  const SharedTerms shared{rate,
                           yield,
                           limit,
                           &collocation_,
                           &premium_,
                           by_rate.data(),
                           by_yield.data(),
                           premium_by_rate.data(),
                           premium_by_yield.data()};
  HWY_DYNAMIC_DISPATCH(panel_lanes)(shared, columns);

  constexpr double kSettled = 1e-4;
  out.converged = true;
  for (std::size_t j = 0; j < kPanelVols; ++j)
    if (!(columns.moves[j] < kSettled) || !std::isfinite(columns.log_boundaries[j]))
      out.converged = false;
  for (double& premium : columns.premiums) {
    if (!(premium > 0) || !std::isfinite(premium)) out.converged = false;
    premium = std::log(std::max(premium, 1e-300));
  }
  if (!out.converged) return out;
  for (std::size_t m = 0; m < kPanelVols; ++m)
    for (std::size_t j = 0; j < kPanelVols; ++j)
      out.log_boundary[m] += vol_transform_[m * kPanelVols + j] * columns.log_boundaries[j];
  std::array<double, kPanelSpots * kPanelVols> half_way{};
  for (std::size_t y = 0; y < kPanelSpots; ++y)
    for (std::size_t m = 0; m < kPanelVols; ++m)
      for (std::size_t j = 0; j < kPanelVols; ++j)
        half_way[y * kPanelVols + m] +=
            vol_transform_[m * kPanelVols + j] * columns.premiums[y * kPanelVols + j];
  for (std::size_t m = 0; m < kPanelSpots; ++m)
    for (std::size_t y = 0; y < kPanelSpots; ++y)
      for (std::size_t j = 0; j < kPanelVols; ++j)
        out.log_premium[m * kPanelVols + j] +=
            spot_transform_[m * kPanelSpots + y] * half_way[y * kPanelVols + j];
  return out;
}

}  // namespace duskgrid::pricing
#endif  // HWY_ONCE
