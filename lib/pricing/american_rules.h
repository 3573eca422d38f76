// Nodes and weights that the American engines share: collocation of the exercise boundary in the
// root of time left and quadrature over time. All for a unit time; nothing here depends on a price.
#pragma once

#include <cstddef>
#include <vector>

namespace duskgrid::pricing {

// Gauss-Legendre nodes and weights on [-1, 1], points >= 1. Newton's iteration on P_n from the
// asymptotic zeros (Abramowitz & Stegun 22.16.6, 25.4.29); error a few ulp.
struct GaussRule {
  std::vector<double> nodes, weights;
};
GaussRule gauss_legendre(std::size_t points);

// The double exponential rule on [0, 1], whose points crowd at both ends: distances from the ends,
// and weights. points >= 2. H. Takahasi, M. Mori, Publ. RIMS 9 (1974) 721-741.
struct UnitPoint {
  double from_low, from_high, weight;
};
std::vector<UnitPoint> double_exponential_rule(std::size_t points);

// Quadrature over the age v in (0, t) of an integrand that also depends on what is left, u = t - v.
// In the angle, v = t sin^2 and u = t cos^2, both roots are analytic, so that the square-root
// behaviour of boundaries at u = 0 and of the normal densities at v = 0 costs no accuracy.
//
// The boundary is carried as beta = ln(B / X) <= 0, X its limit at expiry, by the values of beta^2
// at the Chebyshev points root[j] = (1 + cos(j pi / n)) / 2 of the root of u, j < n; it is 0 at the
// last point, u = 0. (beta^2 in the root of time: Andersen, Lake, Offengenden, J. Comput. Finance
// 20(1) (2016).)
struct AgeRule {
  std::size_t points = 0, nodes = 0;
  std::vector<double> root_age;       // sqrt(v), a unit of t
  std::vector<double> root_left;      // sqrt(u)
  std::vector<double> weight;         // the integral of f dv is sum f sqrt(v) weight
  std::vector<double> interpolation;  // points x nodes: beta^2(u) = row . values
};

// The equations of node i are the rows i * points to (i + 1) * points of `ages`.
struct CollocationRule {
  std::size_t nodes = 0, points = 0;
  std::vector<double> root;  // nodes of them, falling from 1
  AgeRule ages;
};

// The row of `interpolation` for one root of time left, in (0, 1], at the roots of a rule.
void interpolation_row(const std::vector<double>& root, double at, double* row);

CollocationRule collocation_rule(std::size_t nodes, std::size_t points);
// For the premium at the full time: Gauss-Legendre, more points near v = 0 than by the angle.
AgeRule premium_rule(std::size_t nodes, std::size_t points);
// The same by the double exponential rule: for prices next to the boundary, where the integrand
// has a layer.
AgeRule double_exponential_premium_rule(std::size_t nodes, std::size_t points);

}  // namespace duskgrid::pricing
