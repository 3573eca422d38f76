#include "surface/backbone.h"

#include <fmt/format.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <unsupported/Eigen/AutoDiff>

namespace duskgrid::surface {
namespace {

using Eigen::MatrixXd;
using Eigen::Vector3d;
using Eigen::VectorXd;
using Derivative = Eigen::AutoDiffScalar<VectorXd>;

// Three free parameters a slice, in this order: rho; a, the growth of theta above the least that
// the calendar allows; c, where psi lies between its least and largest value.
constexpr Eigen::Index kPerSlice = 3;
constexpr double kLargestRho = 0.999;
// theta may not stand still: a calendar margin far below any price. In units of total variance.
constexpr double kLeastGrowth = 1e-12;
// Kept within the conditions, relative, so that the numbers as rounded satisfy them exactly and the
// certificate need not argue about last digits.
constexpr double kWingMargin = 1e-12;
constexpr double kGrowthMargin = 1e-10;
// Short of 1 so that the strict inequalities of the parametrisation stay strict after rounding.
constexpr double kLargestC = 0.9999;
// Pulls, in half-spreads per unit, on what a slice with under five quotes cannot tell: towards its
// neighbour with a four-hundredth of the weight of a quote, and weaker still towards no smile.
constexpr double kThinPull = 0.05;
constexpr double kFlatPull = 0.005;
constexpr std::size_t kTellsAlone = 5;

template <class T>
struct Slice {
  T theta, rho, psi;
};

// Mingone 2022: p_i, theta_i, A_i, C_i in that notation.
template <class T>
std::vector<Slice<T>> map_parameters(const std::vector<T>& q) {
  using std::min, std::max, std::sqrt, std::abs;
  const std::size_t n = q.size() / kPerSlice;
  std::vector<Slice<T>> out(n);
  std::vector<T> p(n), reach(n);
  for (std::size_t i = 0; i < n; ++i) {
    out[i].rho = q[kPerSlice * i];
    if (i == 0) {
      p[i] = T(1.0) + 0.0 * q[0];
      out[i].theta = q[1];
      continue;
    }
    const T up = (1.0 + out[i - 1].rho) / (1.0 + out[i].rho);
    const T down = (1.0 - out[i - 1].rho) / (1.0 - out[i].rho);
    p[i] = (1 + kWingMargin) * (up > down ? up : down);
    out[i].theta = (1 + kGrowthMargin) * out[i - 1].theta * p[i] + q[kPerSlice * i + 1];
  }
  // Largest psi_i that leaves room for itself and every later slice.
  for (std::size_t i = n; i-- > 0;) {
    const T slope = 1.0 + (out[i].rho < 0 ? T(-out[i].rho) : out[i].rho);
    const T by_wing = 4.0 / slope;
    const T by_curvature = sqrt(T(4.0 * out[i].theta / slope));
    reach[i] = (1 - kWingMargin) * (by_wing < by_curvature ? by_wing : by_curvature);
    if (i + 1 < n) {
      const T later = reach[i + 1] / p[i + 1];
      if (later < reach[i]) reach[i] = later;
    }
  }
  for (std::size_t i = 0; i < n; ++i) {
    T low = T(0.0 * q[0]);
    T high = reach[i];
    if (i > 0) {
      low = out[i - 1].psi * p[i];
      const T flat = out[i - 1].psi * out[i].theta / out[i - 1].theta;
      if (flat < high) high = flat;
    }
    out[i].psi = low + q[kPerSlice * i + 2] * T(high - low);
  }
  return out;
}

double huber(double r, double threshold) {
  const double a = std::abs(r);
  return a <= threshold ? 0.5 * r * r : threshold * (a - 0.5 * threshold);
}

// Gradient of w in (theta, rho, psi).
Vector3d sensitivity(const SliceParameters& s, double k) {
  const double u = s.psi * k + s.rho * s.theta;
  const double root = std::sqrt(u * u + s.theta * s.theta * (1 - s.rho * s.rho));
  return {0.5 * (1 + (s.rho * s.psi * k + s.theta) / root), 0.5 * s.psi * k * (1 + s.theta / root),
          0.5 * k * (s.rho + u / root)};
}

class Problem {
 public:
  Problem(std::span<const FitSlice> slices, const BackboneOptions& options)
      : slices_(slices), options_(options) {}

  std::size_t size() const { return slices_.size(); }

  std::vector<SliceParameters> parameters(const VectorXd& q) const {
    std::vector<SliceParameters> out;
    out.reserve(size());
    for (const auto& s : map_parameters(std::vector<double>(q.begin(), q.end())))
      out.push_back({s.theta, s.rho, s.psi});
    return out;
  }

  double cost(const VectorXd& q) const {
    const auto fitted = parameters(q);
    double total = 0;
    for (std::size_t i = 0; i < size(); ++i)
      for (const FitQuote& quote : slices_[i].quotes)
        total += huber(residual(fitted[i], slices_[i].year_fraction, quote),
                       options_.huber_half_spreads);
    for (const Pull& pull : pulls(q)) total += 0.5 * pull.value * pull.value;
    return total;
  }

  // Gauss-Newton matrix and gradient, robust weights included.
  void normal_equations(const VectorXd& q, MatrixXd& hessian, VectorXd& gradient) const {
    const Eigen::Index count = q.size();
    std::vector<Derivative> free(static_cast<std::size_t>(count));
    for (Eigen::Index j = 0; j < count; ++j) free[j] = Derivative(q[j], VectorXd::Unit(count, j));
    const auto mapped = map_parameters(free);
    hessian.setZero(count, count);
    gradient.setZero(count);
    for (std::size_t i = 0; i < size(); ++i) {
      const auto& m = mapped[i];
      Eigen::Matrix3d inner = Eigen::Matrix3d::Zero();
      Vector3d slope = Vector3d::Zero();
      accumulate({m.theta.value(), m.rho.value(), m.psi.value()}, slices_[i], inner, slope);
      MatrixXd chain(3, count);
      chain << m.theta.derivatives().transpose(), m.rho.derivatives().transpose(),
          m.psi.derivatives().transpose();
      hessian.noalias() += chain.transpose() * (inner * chain);
      gradient.noalias() += chain.transpose() * slope;
    }
    for (const Pull& pull : pulls(q)) {
      gradient[pull.to] += pull.weight * pull.value;
      hessian(pull.to, pull.to) += pull.weight * pull.weight;
      if (pull.from == kNone) continue;
      gradient[pull.from] -= pull.weight * pull.value;
      hessian(pull.from, pull.from) += pull.weight * pull.weight;
      hessian(pull.from, pull.to) -= pull.weight * pull.weight;
      hessian(pull.to, pull.from) -= pull.weight * pull.weight;
    }
  }

 private:
  // A residual weight * (q[to] - q[from]), or weight * q[to] when from is kNone.
  static constexpr Eigen::Index kNone = -1;
  struct Pull {
    Eigen::Index from, to;
    double weight, value;
  };

  double half_spread(const FitQuote& quote) const {
    return std::max(quote.half_spread, options_.least_half_spread);
  }

  double residual(const SliceParameters& s, double t, const FitQuote& quote) const {
    return (std::sqrt(smile_at(s, quote.k).w / t) - quote.vol) / half_spread(quote);
  }

  void accumulate(const SliceParameters& s, const FitSlice& slice, Eigen::Matrix3d& inner,
                  Vector3d& slope) const {
    for (const FitQuote& quote : slice.quotes) {
      const double vol = std::sqrt(smile_at(s, quote.k).w / slice.year_fraction);
      const double h = half_spread(quote);
      const double r = (vol - quote.vol) / h;
      const double weight = std::min(1.0, options_.huber_half_spreads / std::abs(r));
      const Vector3d row = sensitivity(s, quote.k) / (2 * vol * slice.year_fraction * h);
      inner += weight * row * row.transpose();
      slope += weight * r * row;
    }
  }

  std::vector<Pull> pulls(const VectorXd& q) const {
    std::vector<Pull> out;
    const auto n = static_cast<Eigen::Index>(size());
    for (Eigen::Index i = 0; i < n; ++i) {
      if (slices_[i].quotes.size() >= kTellsAlone) continue;
      const Eigen::Index neighbour = i > 0 ? i - 1 : 1;
      for (const Eigen::Index part : {0, 2}) {
        const Eigen::Index to = kPerSlice * i + part;
        out.push_back({kNone, to, kFlatPull, kFlatPull * q[to]});
        if (n == 1) continue;
        const Eigen::Index from = kPerSlice * neighbour + part;
        out.push_back({from, to, kThinPull, kThinPull * (q[to] - q[from])});
      }
    }
    return out;
  }

  std::span<const FitSlice> slices_;
  BackboneOptions options_;
};

// Bounds of every parameter.
struct Box {
  VectorXd low, high;
  explicit Box(std::size_t slices) {
    const auto n = kPerSlice * static_cast<Eigen::Index>(slices);
    low.resize(n);
    high.resize(n);
    for (Eigen::Index i = 0; i < n; i += kPerSlice) {
      low.segment<3>(i) << -kLargestRho, kLeastGrowth, 0.0;
      high.segment<3>(i) << kLargestRho, 1e6, kLargestC;
    }
  }
  VectorXd clamp(const VectorXd& q) const { return q.cwiseMax(low).cwiseMin(high); }
};

struct Descent {
  VectorXd q;
  double cost;
  int iterations;
  FitEnd end;
};

// One damped step with the parameters that press against their bounds held there.
VectorXd damped_step(const VectorXd& q, const MatrixXd& hessian, const VectorXd& gradient,
                     double damping, const Box& box) {
  std::vector<Eigen::Index> free;
  for (Eigen::Index j = 0; j < q.size(); ++j) {
    const bool held = (q[j] <= box.low[j] && gradient[j] > 0) ||
                      (q[j] >= box.high[j] && gradient[j] < 0) || hessian(j, j) == 0;
    if (!held) free.push_back(j);
  }
  VectorXd step = VectorXd::Zero(q.size());
  if (free.empty()) return step;
  // In units of each parameter's own curvature, so that the damping means the same to all.
  const VectorXd scale = VectorXd(hessian.diagonal()(free)).cwiseSqrt().cwiseInverse();
  MatrixXd a = scale.asDiagonal() * MatrixXd(hessian(free, free)) * scale.asDiagonal();
  a.diagonal().array() += damping;
  const VectorXd b = -(scale.asDiagonal() * VectorXd(gradient(free)));
  step(free) = scale.asDiagonal() * VectorXd(a.ldlt().solve(b));
  return step;
}

Descent descend(const Problem& problem, VectorXd q, const Box& box, int most_iterations) {
  constexpr double kFirstDamping = 1e-3;
  constexpr double kLargestDamping = 1e12;
  constexpr double kSettled = 1e-13;     // relative fall of the cost, or
  constexpr double kNegligible = 1e-10;  // a fall worth 1e-5 of a half-spread
  constexpr int kSettledSteps = 3;
  q = box.clamp(q);
  double cost = problem.cost(q);
  double damping = kFirstDamping;
  MatrixXd hessian;
  VectorXd gradient;
  int settled = 0;
  for (int i = 0; i < most_iterations; ++i) {
    problem.normal_equations(q, hessian, gradient);
    bool moved = false;
    while (!moved && damping < kLargestDamping) {
      const VectorXd trial = box.clamp(q + damped_step(q, hessian, gradient, damping, box));
      const double trial_cost = problem.cost(trial);
      moved = trial_cost < cost;
      if (!moved) {
        damping *= 4;
        continue;
      }
      settled = cost - trial_cost <= kSettled * cost + kNegligible ? settled + 1 : 0;
      q = trial;
      cost = trial_cost;
      damping = std::max(damping / 8, 1e-15);
    }
    if (!moved || settled >= kSettledSteps || cost == 0) return {q, cost, i + 1, FitEnd::converged};
  }
  return {q, cost, most_iterations, FitEnd::stopped_early};
}

// At-the-money total variance by the quotes nearest k = 0.
double at_the_money_variance(const FitSlice& slice) {
  const auto nearest = std::min_element(
      slice.quotes.begin(), slice.quotes.end(),
      [](const FitQuote& a, const FitQuote& b) { return std::abs(a.k) < std::abs(b.k); });
  return nearest->vol * nearest->vol * slice.year_fraction;
}

// The box coordinates of slices that share one rho and one fraction c.
VectorXd common_start(std::span<const FitSlice> slices, double rho, double c) {
  VectorXd q(kPerSlice * static_cast<Eigen::Index>(slices.size()));
  double previous = 0;
  for (std::size_t i = 0; i < slices.size(); ++i) {
    const double theta = std::max(at_the_money_variance(slices[i]), previous);
    q.segment<3>(kPerSlice * static_cast<Eigen::Index>(i)) << rho, theta - previous, c;
    previous = theta;
  }
  return q;
}

}  // namespace

std::optional<std::string> BackboneOptions::problem() const {
  if (!(huber_half_spreads > 0))
    return fmt::format("huber_half_spreads = {}, must be > 0", huber_half_spreads);
  if (!(least_half_spread > 0))
    return fmt::format("least_half_spread = {}, must be > 0", least_half_spread);
  if (most_iterations < 1)
    return fmt::format("most_iterations = {}, must be >= 1", most_iterations);
  return std::nullopt;
}

SmilePoint smile_at(const SliceParameters& s, double k) {
  const double u = s.psi * k + s.rho * s.theta;
  const double breadth = s.theta * s.theta * (1 - s.rho * s.rho);
  const double root = std::sqrt(u * u + breadth);
  return {.w = 0.5 * (s.theta + s.rho * s.psi * k + root),
          .dw_dk = 0.5 * s.psi * (s.rho + u / root),
          .d2w_dk2 = 0.5 * s.psi * s.psi * breadth / (root * root * root)};
}

double durrleman(const SmilePoint& p, double k) {
  const double first = 1 - k * p.dw_dk / (2 * p.w);
  return first * first - 0.25 * p.dw_dk * p.dw_dk * (1 / p.w + 0.25) + 0.5 * p.d2w_dk2;
}

Result<BackboneFit> fit_backbone(std::span<const FitSlice> slices, const BackboneOptions& options) {
  if (const auto problem = options.problem())
    return Failure{Fault::configuration, "backbone", *problem};
  const auto empty = [](const FitSlice& s) { return s.quotes.empty(); };
  const auto unusable = [](const FitSlice& s) {
    return !(s.year_fraction > 0) ||
           std::any_of(s.quotes.begin(), s.quotes.end(), [](const FitQuote& q) {
             return !std::isfinite(q.k) || !std::isfinite(q.half_spread) || !(q.vol > 0) ||
                    !std::isfinite(q.vol);
           });
  };
  if (slices.empty() || std::any_of(slices.begin(), slices.end(), empty))
    return Failure{Fault::not_enough_data, "backbone", "every slice needs a quote"};
  if (std::any_of(slices.begin(), slices.end(), unusable))
    return Failure{Fault::not_enough_data, "backbone", "a quote or a time is not a number"};

  const Problem problem(slices, options);
  const Box box(slices.size());
  // A skewed and a level start: the cost has more than one valley.
  std::optional<Descent> best;
  for (const auto& [rho, c] : {std::pair{-0.5, 0.5}, {0.0, 0.3}}) {
    Descent end = descend(problem, common_start(slices, rho, c), box, options.most_iterations);
    if (!best || end.cost < best->cost) best = std::move(end);
  }
  return BackboneFit{problem.parameters(best->q), best->end, best->cost, best->iterations};
}

}  // namespace duskgrid::surface
