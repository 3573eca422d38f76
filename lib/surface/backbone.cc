#include "surface/backbone.h"

#include <fmt/format.h>

#include <Eigen/Dense>
#include <algorithm>
#include <cmath>
#include <unsupported/Eigen/AutoDiff>

namespace duskgrid::surface {
namespace {

using Eigen::Index;
using Eigen::Matrix3d;
using Eigen::Vector3d;
using Eigen::VectorXd;
using Derivative = Eigen::AutoDiffScalar<Eigen::Matrix<double, 6, 1>>;

// Three free parameters a slice, in this order: rho; a, the growth of theta above the least that
// the calendar allows; c, where psi lies between its least and largest value.
constexpr Index kPerSlice = 3;
constexpr double kLargestRho = 0.999;
// theta may not stand still: a calendar margin far below any price. In units of total variance.
constexpr double kLeastGrowth = 1e-12;
// Kept within the conditions, relative, so that the numbers as rounded satisfy them and slices do
// not all but touch, which is slow to prove.
constexpr double kWingMargin = 1e-9;
constexpr double kGrowthMargin = 2e-5;
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

template <class T>
T lesser(const T& a, const T& b) {
  return a < b ? a : b;
}

// Largest psi of a slice by B1 and B2 (docs/methods.md, 5.1).
template <class T>
T reach_of(const T& theta, const T& rho) {
  using std::sqrt;
  const T slope = 1.0 + (rho < 0 ? T(-rho) : rho);
  const T by_wing = 4.0 / slope, by_curvature = sqrt(T(4.0 * theta / slope));
  return (1 - kWingMargin) * lesser(by_wing, by_curvature);
}

// By how much theta and psi grow at least from a slice of correlation `before` to one of `after`.
template <class T>
T growth_of(const T& before, const T& after) {
  const T up = (1.0 + before) / (1.0 + after), down = (1.0 - before) / (1.0 - after);
  return (1 + kWingMargin) * (up > down ? up : down);
}

// One slice of the parametrisation, Mingone 2022: p_i, theta_i, A_i, C_i in that notation. `later`
// is the largest psi that leaves room for the slices after it. No slice before the first.
template <class T>
Slice<T> next_slice(const Slice<T>* before, const T& rho, const T& a, const T& c, double later) {
  Slice<T> out{a, rho, T(0.0 * a)};
  T low = T(0.0 * a);
  T high = lesser(reach_of(out.theta, rho), T(later + 0.0 * a));
  if (before) {
    const T p = growth_of(before->rho, rho);
    out.theta = (1 + kGrowthMargin) * before->theta * p + a;
    low = before->psi * p;
    high = lesser(lesser(reach_of(out.theta, rho), T(later + 0.0 * a)),
                  T(before->psi * out.theta / before->theta));
  }
  out.psi = low + c * T(high - low);
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

// The cost to second order about one point, by slices. A slice's parameters x_i follow from those
// before it and its own free ones q_i: to first order dx_i = from_before dx_{i-1} + from_own dq_i.
struct Stage {
  Matrix3d from_before, from_own;
  Matrix3d misfit_hessian;  // Gauss-Newton, in (theta, rho, psi)
  Vector3d misfit_gradient;
  Vector3d pull_hessian, pull_gradient;  // in q
  Vector3d gradient, curvature;          // of the whole cost in q; diagonal of its Hessian
};

class Problem {
 public:
  Problem(std::span<const FitSlice> slices, const BackboneOptions& options)
      : slices_(slices), options_(options) {}

  std::size_t size() const { return slices_.size(); }

  std::vector<SliceParameters> parameters(const VectorXd& q) const {
    const auto later = rooms(q);
    std::vector<SliceParameters> out;
    out.reserve(size());
    std::optional<Slice<double>> before;
    for (std::size_t i = 0; i < size(); ++i) {
      const Vector3d own = own_of(q, i);
      before = next_slice(before ? &*before : nullptr, own[0], own[1], own[2], later[i]);
      out.push_back({before->theta, before->rho, before->psi});
    }
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

  std::vector<Stage> expand(const VectorXd& q) const {
    std::vector<Stage> stages(size());
    differentiate(q, stages);
    for (const Pull& pull : pulls(q)) add(pull, stages);
    // Adjoints: what a change of x_i costs, its effect on later slices included.
    Vector3d gradient = Vector3d::Zero();
    Matrix3d hessian = Matrix3d::Zero();
    for (std::size_t i = size(); i-- > 0;) {
      Stage& s = stages[i];
      gradient += s.misfit_gradient;
      hessian += s.misfit_hessian;
      s.gradient = s.from_own.transpose() * gradient + s.pull_gradient;
      s.curvature = (s.from_own.transpose() * hessian * s.from_own).diagonal() + s.pull_hessian;
      gradient = s.from_before.transpose() * gradient;
      hessian = s.from_before.transpose() * hessian * s.from_before;
    }
    return stages;
  }

 private:
  // A residual weight * (q[to] - q[from]), or weight * q[to] when from is kNone.
  static constexpr Index kNone = -1;
  struct Pull {
    Index from, to;
    double weight, value;
  };

  static Vector3d own_of(const VectorXd& q, std::size_t i) {
    return q.segment<3>(kPerSlice * static_cast<Index>(i));
  }

  // Largest psi of each slice that leaves room for every later one.
  std::vector<double> rooms(const VectorXd& q) const {
    std::vector<double> theta(size()), growth(size(), 1), out(size(), HUGE_VAL);
    for (std::size_t i = 0; i < size(); ++i) {
      const Vector3d own = own_of(q, i);
      theta[i] = own[1];
      if (i == 0) continue;
      growth[i] = growth_of(own_of(q, i - 1)[0], own[0]);
      theta[i] += (1 + kGrowthMargin) * theta[i - 1] * growth[i];
    }
    for (std::size_t i = size(); i-- > 1;)
      out[i - 1] = std::min(reach_of(theta[i], own_of(q, i)[0]), out[i]) / growth[i];
    return out;
  }

  // Room for later slices is taken as fixed: that changes the way, not the end.
  void differentiate(const VectorXd& q, std::vector<Stage>& stages) const {
    const auto later = rooms(q);
    const auto fitted = parameters(q);
    for (std::size_t i = 0; i < size(); ++i) {
      const Vector3d own = own_of(q, i);
      const SliceParameters& p = fitted[i > 0 ? i - 1 : 0];
      const auto variable = [](double value, int at) { return Derivative(value, 6, at); };
      const Slice<Derivative> before{variable(p.theta, 0), variable(p.rho, 1), variable(p.psi, 2)};
      const auto x = next_slice(i > 0 ? &before : nullptr, variable(own[0], 3), variable(own[1], 4),
                                variable(own[2], 5), later[i]);
      Eigen::Matrix<double, 3, 6> all;
      all << x.theta.derivatives().transpose(), x.rho.derivatives().transpose(),
          x.psi.derivatives().transpose();
      Stage& s = stages[i];
      s.from_before = all.leftCols<3>();
      s.from_own = all.rightCols<3>();
      s.misfit_hessian.setZero();
      s.misfit_gradient.setZero();
      s.pull_hessian.setZero();
      s.pull_gradient.setZero();
      accumulate(fitted[i], slices_[i], s.misfit_hessian, s.misfit_gradient);
    }
  }

  // Slices are tied by a pull: half of that is left out of the Hessian, and made up for by counting
  // what is left twice.
  static void add(const Pull& pull, std::vector<Stage>& stages) {
    const auto at = [&](Index to, double sign) {
      Stage& s = stages[static_cast<std::size_t>(to / kPerSlice)];
      s.pull_gradient[to % kPerSlice] += sign * pull.weight * pull.value;
      s.pull_hessian[to % kPerSlice] += (pull.from == kNone ? 1 : 2) * pull.weight * pull.weight;
    };
    at(pull.to, 1);
    if (pull.from != kNone) at(pull.from, -1);
  }

  double half_spread(const FitQuote& quote) const {
    return std::max(quote.half_spread, options_.least_half_spread);
  }

  double residual(const SliceParameters& s, double t, const FitQuote& quote) const {
    return (std::sqrt(smile_at(s, quote.k).w / t) - quote.vol) / half_spread(quote);
  }

  void accumulate(const SliceParameters& s, const FitSlice& slice, Matrix3d& inner,
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
    const auto n = static_cast<Index>(size());
    for (Index i = 0; i < n; ++i) {
      if (slices_[i].quotes.size() >= kTellsAlone) continue;
      const Index neighbour = i > 0 ? i - 1 : 1;
      for (const Index part : {0, 2}) {
        const Index to = kPerSlice * i + part;
        out.push_back({kNone, to, kFlatPull, kFlatPull * q[to]});
        if (n == 1) continue;
        const Index from = kPerSlice * neighbour + part;
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

// One damped step with the parameters that press against their bounds held there: the quadratic
// programme of the stages, by dynamic programming from the last slice to the first. In units of
// each parameter's own curvature, so that the damping means the same to all.
VectorXd damped_step(const VectorXd& q, const std::vector<Stage>& stages, double damping,
                     const Box& box) {
  struct Reply {  // dq_i = -(by_before dx_{i-1} + constant)
    Matrix3d by_before;
    Vector3d constant;
  };
  std::vector<Reply> replies(stages.size());
  // Cost of dx_i from slice i on: dx'hessian dx / 2 + gradient'dx.
  Matrix3d hessian = Matrix3d::Zero();
  Vector3d gradient = Vector3d::Zero();
  for (std::size_t i = stages.size(); i-- > 0;) {
    const Stage& s = stages[i];
    hessian += s.misfit_hessian;
    gradient += s.misfit_gradient;
    Matrix3d own = s.from_own;
    Vector3d pull = s.pull_gradient, diagonal = s.pull_hessian + damping * s.curvature;
    for (Index j = 0; j < 3; ++j) {
      const Index at = kPerSlice * static_cast<Index>(i) + j;
      const bool held = (q[at] <= box.low[at] && s.gradient[j] > 0) ||
                        (q[at] >= box.high[at] && s.gradient[j] < 0) || s.curvature[j] == 0;
      if (!held) continue;
      own.col(j).setZero();
      pull[j] = 0;
      diagonal[j] = 1;
    }
    const Matrix3d across = own.transpose() * hessian;
    Matrix3d inner = across * own;
    inner.diagonal() += diagonal;
    const Vector3d scale = inner.diagonal().cwiseSqrt().cwiseInverse();
    const Eigen::LDLT<Matrix3d> factor(scale.asDiagonal() * inner * scale.asDiagonal());
    const auto solve = [&](const auto& right) {
      return (scale.asDiagonal() * factor.solve(scale.asDiagonal() * right)).eval();
    };
    const Matrix3d towards = across * s.from_before;
    const Vector3d constant = own.transpose() * gradient + pull;
    replies[i] = {solve(towards), solve(constant)};
    gradient =
        (s.from_before.transpose() * gradient - towards.transpose() * replies[i].constant).eval();
    hessian = (s.from_before.transpose() * hessian * s.from_before -
               towards.transpose() * replies[i].by_before)
                  .eval();
  }
  VectorXd step = VectorXd::Zero(q.size());
  Vector3d x = Vector3d::Zero();
  for (std::size_t i = 0; i < stages.size(); ++i) {
    Vector3d own = -(replies[i].by_before * x + replies[i].constant);
    for (Index j = 0; j < 3; ++j) {
      const Index at = kPerSlice * static_cast<Index>(i) + j;
      const auto& g = stages[i].gradient;
      if ((q[at] <= box.low[at] && g[j] > 0) || (q[at] >= box.high[at] && g[j] < 0)) own[j] = 0;
      step[at] = own[j];
    }
    x = (stages[i].from_before * x + stages[i].from_own * own).eval();
  }
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
  int settled = 0;
  for (int i = 0; i < most_iterations; ++i) {
    const auto stages = problem.expand(q);
    bool moved = false;
    while (!moved && damping < kLargestDamping) {
      const VectorXd trial = box.clamp(q + damped_step(q, stages, damping, box));
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
                    !std::isfinite(q.vol) || !std::isfinite(q.vol_bid) || !std::isfinite(q.vol_ask);
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
