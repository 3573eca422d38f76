#include "surface/quadratic_program.h"

#include <algorithm>
#include <cmath>

namespace duskgrid::surface {
namespace {

using Eigen::Index;
using Eigen::MatrixXd;
using Eigen::VectorXd;
using Blocks = std::vector<VectorXd>;

constexpr int kMostIterations = 100;
// Of complementarity, per row, in units of the objective, and of the residuals relative to what
// they are made of: what is aimed at, and what is accepted where it goes no further.
constexpr double kAccuracy = 1e-9, kAcceptable = 1e-6;
constexpr double kDear = 1e3;     // penalties from here on are beyond any pull
constexpr double kSmallPull = 1;  // pulls are not measured against less
constexpr double kKeepInside = 0.995;

double product(const QuadraticRow& row, const Blocks& x) {
  double sum = 0;
  for (Index i = 0; i < 4; ++i)
    sum += row.value[static_cast<std::size_t>(i)] * x[row.block][row.first + i];
  if (!row.ties) return sum;
  for (Index i = 0; i < 4; ++i)
    sum += row.next_value[static_cast<std::size_t>(i)] * x[row.block + 1][row.next_first + i];
  return sum;
}

void add(const QuadraticRow& row, double scale, Blocks& x) {
  for (Index i = 0; i < 4; ++i)
    x[row.block][row.first + i] += scale * row.value[static_cast<std::size_t>(i)];
  if (!row.ties) return;
  for (Index i = 0; i < 4; ++i)
    x[row.block + 1][row.next_first + i] += scale * row.next_value[static_cast<std::size_t>(i)];
}

// Adds |scale a|.
void add_sizes(const QuadraticRow& row, double scale, Blocks& x) {
  for (Index i = 0; i < 4; ++i)
    x[row.block][row.first + i] += std::abs(scale * row.value[static_cast<std::size_t>(i)]);
  if (!row.ties) return;
  for (Index i = 0; i < 4; ++i)
    x[row.block + 1][row.next_first + i] +=
        std::abs(scale * row.next_value[static_cast<std::size_t>(i)]);
}

using Four = Eigen::Map<const Eigen::Vector4d>;

// Block tridiagonal, factored in place: L L' with the ties below the diagonal.
struct Chain {
  std::vector<MatrixXd> diagonal, below;
  std::vector<Eigen::LLT<MatrixXd>> factors;

  void reset(const std::vector<MatrixXd>& hessian) {
    diagonal = hessian;
    below.resize(hessian.size() - 1);
    for (std::size_t j = 0; j + 1 < hessian.size(); ++j)
      below[j].setZero(hessian[j + 1].rows(), hessian[j].rows());
    factors.resize(hessian.size());
  }

  void add(const QuadraticRow& row, double weight) {
    const Four a(row.value.data());
    diagonal[row.block].block<4, 4>(row.first, row.first).noalias() += weight * a * a.transpose();
    if (!row.ties) return;
    const Four b(row.next_value.data());
    diagonal[row.block + 1].block<4, 4>(row.next_first, row.next_first).noalias() +=
        weight * b * b.transpose();
    below[row.block].block<4, 4>(row.next_first, row.first).noalias() += weight * b * a.transpose();
  }

  bool factor() {
    for (std::size_t j = 0; j < diagonal.size(); ++j) {
      factors[j].compute(diagonal[j]);
      if (factors[j].info() != Eigen::Success) return false;
      if (j + 1 == diagonal.size()) break;
      // below := below L^-T; the next diagonal loses below below'.
      factors[j].matrixL().solveInPlace<Eigen::OnTheLeft>(below_transposed(j));
      diagonal[j + 1].noalias() -= tied_[j].transpose() * tied_[j];
    }
    return true;
  }

  void solve(Blocks& x) const {
    for (std::size_t j = 0; j < x.size(); ++j) {
      if (j > 0) x[j].noalias() -= tied_[j - 1].transpose() * x[j - 1];
      factors[j].matrixL().solveInPlace(x[j]);
    }
    for (std::size_t j = x.size(); j-- > 0;) {
      if (j + 1 < x.size()) x[j].noalias() -= tied_[j] * x[j + 1];
      factors[j].matrixU().solveInPlace(x[j]);
    }
  }

 private:
  MatrixXd& below_transposed(std::size_t j) {
    tied_.resize(below.size());
    tied_[j] = below[j].transpose();
    return tied_[j];
  }
  std::vector<MatrixXd> tied_;  // L_j^-1 below_j'
};

// What one row carries beside x: v = a'x - bound + t > 0 with multiplier z; of soft rows the
// shortfall t > 0 with multiplier y = penalty - z > 0.
struct State {
  double v, z, t, y;
};

class Solver {
 public:
  Solver(const QuadraticProgram& program, const Blocks& start)
      : p_(program),
        x_(start),
        states_(program.rows.size()),
        step_(program.rows.size()),
        wanted_(program.rows.size()) {
    first_states();
    for (const auto& row : p_.rows) complementary_ += soft(row) ? 2 : 1;
  }

  QuadraticSolution run() {
    if (p_.rows.empty()) return without_rows();
    for (int i = 0; i < kMostIterations; ++i) {
      const double mu = residuals();
      if (accurate(mu, kAccuracy)) return {std::move(x_), true, i};
      // Rounding may stop it short of that.
      if (!std::isfinite(mu) || !factor()) return {std::move(x_), accurate(mu, kAcceptable), i};
      direction([](std::size_t) { return 0.0; }, [](std::size_t) { return 0.0; });
      const double predicted = mu_after(std::min(longest(1.0), 1.0));
      const double center = std::pow(predicted / mu, 3) * mu;
      affine_ = step_;
      direction([&](std::size_t k) { return center - affine_[k].v * affine_[k].z; },
                [&](std::size_t k) { return center - affine_[k].t * affine_[k].y; });
      advance(longest(kKeepInside));
    }
    const bool solved = accurate(residuals(), kAcceptable);
    return {std::move(x_), solved, kMostIterations};
  }

 private:
  bool accurate(double mu, double accuracy) const {
    return mu < accuracy && dual_residual_ < accuracy && primal_residual_ < accuracy;
  }

  QuadraticSolution without_rows() {
    chain_.reset(p_.hessian);
    Blocks x = p_.gradient;
    for (auto& block : x) block = -block;
    const bool factored = chain_.factor();
    if (factored) chain_.solve(x);
    return {factored ? std::move(x) : std::move(x_), factored, 1};
  }

  static bool soft(const QuadraticRow& row) { return std::isfinite(row.penalty); }

  // Rows whose penalty is beyond any pull begin like hard ones: their shortfall is next to nothing
  // and a'x - bound + t may differ from v at first. The further the start is from meeting them, the
  // larger the products it begins with: close to the boundary steps would be short.
  void first_states() {
    constexpr double kLeastProduct = 0.1, kByShortfall = 1e3;
    double shortfall = 0;
    for (const QuadraticRow& row : p_.rows)
      if (row.penalty >= kDear) shortfall = std::max(shortfall, row.bound - product(row, x_));
    first_product_ = kLeastProduct + kByShortfall * shortfall;
    for (std::size_t i = 0; i < states_.size(); ++i) states_[i] = first_state(p_.rows[i]);
  }

  State first_state(const QuadraticRow& row) const {
    constexpr double kLeast = 1e-2;
    const double gap = product(row, x_) - row.bound;
    State s{};
    if (row.penalty < kDear) {
      s.v = std::max(gap, 0.0) + kLeast;
      s.t = std::max(-gap, 0.0) + kLeast;
      s.z = row.penalty * (s.t / (s.v + s.t));
      s.y = row.penalty * (s.v / (s.v + s.t));
      return s;
    }
    s.v = std::max(std::abs(gap), kLeast);
    s.z = first_product_ / s.v;
    if (!soft(row)) return s;
    s.z = std::min(s.z, 0.5 * row.penalty);
    s.y = row.penalty - s.z;
    s.t = first_product_ / s.y;
    return s;
  }

  // Residuals of the optimality conditions; returns mu, the mean product of slack and multiplier.
  double residuals() {
    double mu = 0;
    primal_residual_ = 0;
    dual_ = p_.gradient;
    Blocks size(x_.size());  // of the terms of each component
    for (std::size_t j = 0; j < x_.size(); ++j) {
      size[j] = dual_[j].cwiseAbs() + p_.hessian[j].cwiseAbs() * x_[j].cwiseAbs();
      size[j].array() += kSmallPull;
      dual_[j].noalias() += p_.hessian[j] * x_[j];
    }
    for (std::size_t i = 0; i < states_.size(); ++i) {
      const State& s = states_[i];
      const QuadraticRow& row = p_.rows[i];
      mu += s.v * s.z + s.t * s.y;
      add(row, -s.z, dual_);
      add_sizes(row, s.z, size);
      const double gap = product(row, x_) - row.bound;
      const double scale = 1 + std::abs(row.bound) + s.v + s.t;
      primal_residual_ = std::max(primal_residual_, std::abs(gap + s.t - s.v) / scale);
    }
    dual_residual_ = 0;
    for (std::size_t j = 0; j < x_.size(); ++j)
      dual_residual_ =
          std::max(dual_residual_, (dual_[j].array().abs() / size[j].array()).maxCoeff());
    return mu / complementary_;
  }

  double weight(std::size_t i) const {
    const State& s = states_[i];
    return 1 / (s.v / s.z + (soft(p_.rows[i]) ? s.t / s.y : 0));
  }

  bool factor() {
    chain_.reset(p_.hessian);
    for (std::size_t i = 0; i < states_.size(); ++i) chain_.add(p_.rows[i], weight(i));
    return chain_.factor();
  }

  // Newton step towards v z = target_v(i), t y = target_t(i).
  template <class V, class T>
  void direction(V target_v, T target_t) {
    right_ = dual_;
    for (auto& block : right_) block = -block;
    for (std::size_t i = 0; i < states_.size(); ++i) {
      const State& s = states_[i];
      const QuadraticRow& row = p_.rows[i];
      const double shortfall = soft(row) ? target_t(i) / s.y - s.t : 0;
      wanted_[i] = target_v(i) / s.z - (product(row, x_) - row.bound + s.t) - shortfall;
      add(row, weight(i) * wanted_[i], right_);
    }
    chain_.solve(right_);
    for (std::size_t i = 0; i < states_.size(); ++i) {
      const State& s = states_[i];
      const bool is_soft = soft(p_.rows[i]);
      const double dz = weight(i) * (wanted_[i] - product(p_.rows[i], right_));
      step_[i] = {(target_v(i) - s.v * dz) / s.z - s.v, dz,
                  is_soft ? (target_t(i) + s.t * dz) / s.y - s.t : 0, is_soft ? -dz : 0};
    }
  }

  double longest(double share) const {
    double length = 1;
    const auto limit = [&](double value, double change) {
      if (change < 0) length = std::min(length, -share * value / change);
    };
    for (std::size_t i = 0; i < states_.size(); ++i) {
      limit(states_[i].v, step_[i].v);
      limit(states_[i].z, step_[i].z);
      if (!soft(p_.rows[i])) continue;
      limit(states_[i].t, step_[i].t);
      limit(states_[i].y, step_[i].y);
    }
    return length;
  }

  double mu_after(double length) const {
    double mu = 0;
    for (std::size_t i = 0; i < states_.size(); ++i) {
      const State &s = states_[i], &d = step_[i];
      mu +=
          (s.v + length * d.v) * (s.z + length * d.z) + (s.t + length * d.t) * (s.y + length * d.y);
    }
    return mu / complementary_;
  }

  void advance(double length) {
    for (std::size_t j = 0; j < x_.size(); ++j) x_[j] += length * right_[j];
    for (std::size_t i = 0; i < states_.size(); ++i) {
      State& s = states_[i];
      s.v += length * step_[i].v;
      s.z += length * step_[i].z;
      s.t += length * step_[i].t;
      s.y += length * step_[i].y;
    }
  }

  const QuadraticProgram& p_;
  Blocks x_, dual_, right_;
  std::vector<State> states_, step_, affine_;
  std::vector<double> wanted_;  // change of a'x that would bring each row to its targets
  double first_product_ = 0;
  Chain chain_;
  double complementary_ = 0;
  double primal_residual_ = 0, dual_residual_ = 0;
};

}  // namespace

QuadraticSolution solve_quadratic(const QuadraticProgram& program, const Blocks& start) {
  return Solver(program, start).run();
}

}  // namespace duskgrid::surface
