#include "surface/quadratic_program.h"

#include <gtest/gtest.h>

#include <cmath>
#include <random>

namespace duskgrid::surface {
namespace {

using Blocks = std::vector<Eigen::VectorXd>;

double uniform(std::mt19937_64& random) { return static_cast<double>(random() >> 11) * 0x1p-53; }

QuadraticProgram unit(std::size_t blocks, Eigen::Index size) {
  QuadraticProgram p;
  for (std::size_t j = 0; j < blocks; ++j) {
    p.hessian.push_back(Eigen::MatrixXd::Identity(size, size));
    p.gradient.push_back(Eigen::VectorXd::Zero(size));
  }
  return p;
}

double product(const QuadraticRow& row, const Blocks& x) {
  double sum = 0;
  for (Eigen::Index i = 0; i < 4; ++i) {
    sum += row.value[static_cast<std::size_t>(i)] * x[row.block][row.first + i];
    if (row.ties)
      sum += row.next_value[static_cast<std::size_t>(i)] * x[row.block + 1][row.next_first + i];
  }
  return sum;
}

double objective(const QuadraticProgram& p, const Blocks& x) {
  double sum = 0;
  for (std::size_t j = 0; j < x.size(); ++j)
    sum += x[j].dot(0.5 * (p.hessian[j] * x[j]) + p.gradient[j]);
  for (const auto& row : p.rows) sum += row.penalty * std::max(0.0, row.bound - product(row, x));
  return sum;
}

TEST(SolveQuadratic, WithoutRowsSolvesTheNormalEquations) {
  QuadraticProgram p = unit(2, 4);
  p.gradient[1] << -1, 2, -3, 4;
  const auto found = solve_quadratic(p, {Eigen::VectorXd::Ones(4), Eigen::VectorXd::Ones(4)});
  EXPECT_TRUE(found.solved);
  EXPECT_EQ(found.x[0], Eigen::VectorXd::Zero(4));
  EXPECT_EQ(found.x[1], -p.gradient[1]);
}

// min x^2 / 2 with x >= bound at a price: x = min(bound, price), however far the start is off.
TEST(SolveQuadratic, OneRowGoesToItsBoundOrAsFarAsItsPenaltyPays) {
  for (const double bound : {1e-3, 1.0, 1e3})
    for (const double penalty : {20.0, 999.0, 1e4, 1e7, 1e10}) {
      QuadraticProgram p = unit(1, 4);
      p.rows.push_back({0, 0, {1, 0, 0, 0}, bound, penalty});
      const auto found = solve_quadratic(p, {Eigen::VectorXd::Zero(4)});
      EXPECT_TRUE(found.solved) << bound << ' ' << penalty;
      // What is accepted is 1e-6 of the terms; x is their size.
      const double expected = std::min(bound, penalty);
      EXPECT_NEAR(found.x[0][0], expected, 1e-5 * (1 + expected)) << bound << ' ' << penalty;
    }
}

TEST(SolveQuadratic, HardRowsThatContradictEndUnsolved) {
  QuadraticProgram p = unit(1, 4);
  p.rows.push_back({0, 0, {1, 0, 0, 0}, 1});
  p.rows.push_back({0, 0, {-1, 0, 0, 0}, 1});
  EXPECT_FALSE(solve_quadratic(p, {Eigen::VectorXd::Zero(4)}).solved);
}

// Programs as the fit makes them: neighbouring fours of variables, cheap rows in pairs, dear rows,
// rows that tie blocks. No point near a solution is better.
TEST(SolveQuadratic, NoPointNearASolutionIsBetter) {
  std::mt19937_64 random(20310314);
  int solved = 0;
  constexpr int kTrials = 200;
  for (int trial = 0; trial < kTrials; ++trial) {
    constexpr Eigen::Index kSize = 8;
    const auto normal = [&] { return 2 * uniform(random) - 1; };
    QuadraticProgram p = unit(3, kSize);
    for (auto& h : p.hessian) {
      Eigen::MatrixXd a = Eigen::MatrixXd::NullaryExpr(kSize, kSize, normal);
      h = a * a.transpose() + 0.1 * Eigen::MatrixXd::Identity(kSize, kSize);
    }
    for (auto& f : p.gradient) f = Eigen::VectorXd::NullaryExpr(kSize, normal);
    for (int r = 0; r < 40; ++r) {
      QuadraticRow row{random() % 3,
                       static_cast<Eigen::Index>(random() % 5),
                       {},
                       normal(),
                       r % 4 == 0 ? 1e5 : 20.0};
      for (double& v : row.value) v = normal();
      row.ties = r % 8 == 0 && row.block < 2;
      row.next_first = static_cast<Eigen::Index>(random() % 5);
      for (double& v : row.next_value) v = row.ties ? normal() : 0;
      p.rows.push_back(row);
    }
    const auto found = solve_quadratic(p, Blocks(3, Eigen::VectorXd::Zero(kSize)));
    if (!found.solved) continue;
    ++solved;
    const double best = objective(p, found.x);
    for (int other = 0; other < 50; ++other) {
      Blocks x = found.x;
      const double step = std::pow(10.0, -1 - 5 * uniform(random));
      for (auto& block : x) block += step * Eigen::VectorXd::NullaryExpr(kSize, normal);
      // Products of slack and multiplier are accepted up to 1e-6 a row, of 40 and two each.
      EXPECT_GE(objective(p, x), best - 1e-4) << trial;
    }
  }
  EXPECT_GE(solved, kTrials * 99 / 100);
}

}  // namespace
}  // namespace duskgrid::surface
