// Convex quadratic programs whose variables come in a chain of blocks, each tied to the next:
//   minimise  sum_j (x_j' H_j x_j / 2 + f_j' x_j) + sum_soft penalty * max(0, bound - a'x)
//   subject to  a'x >= bound  for the hard rows,
// by a primal-dual interior-point method (S. Mehrotra, SIAM J. Optimization 2 (1992) 575-601).
// The Newton matrix is block tridiagonal: cost linear in the number of blocks.
#pragma once

#include <Eigen/Dense>
#include <array>
#include <limits>
#include <span>
#include <vector>

namespace duskgrid::surface {

// Touches four neighbouring variables of one block and, for `ties`, of the block after it.
struct QuadraticRow {
  std::size_t block;
  Eigen::Index first;
  std::array<double, 4> value;
  double bound;
  double penalty = std::numeric_limits<double>::infinity();  // infinite: hard
  bool ties = false;
  Eigen::Index next_first = 0;
  std::array<double, 4> next_value = {};
};

struct QuadraticProgram {
  std::vector<Eigen::MatrixXd> hessian;  // positive definite, one a block
  std::vector<Eigen::VectorXd> gradient;
  std::vector<QuadraticRow> rows;  // four variables fit into every block they touch
};

struct QuadraticSolution {
  std::vector<Eigen::VectorXd> x;
  bool solved;  // to the accuracy asked for; otherwise x is where it stopped
  int iterations;
};

// `start` need not satisfy the rows, but should not miss those of penalties above 1e3 by more than
// some thousands. Accuracy: complementarity and residuals relative to the size of the program. A
// program whose hard rows contradict one another ends unsolved.
QuadraticSolution solve_quadratic(const QuadraticProgram& program,
                                  const std::vector<Eigen::VectorXd>& start);

}  // namespace duskgrid::surface
