// The overlay of one slice: a cubic spline in log-moneyness added to the backbone's total
// variance. How it is fitted: fit.h.
#pragma once

#include <array>
#include <cstddef>
#include <optional>
#include <string>
#include <vector>

namespace duskgrid::surface {

// u(k) = sum over i of c_i B_i(k), B_i the cubic B-splines of the knots (C. de Boor, A Practical
// Guide to Splines, 1978) and of three more past either end, where the first coefficient serves for
// the first three functions and the last one for the last three. So u has two continuous
// derivatives everywhere and is constant before the first and after the last knot: there a smile
// is a hyperbola with the slopes of its backbone. Where the knots past the ends lie cancels, since
// all functions sum to 1 and those of the other coefficients end at the knots proper.
struct Overlay {
  std::vector<double> knots;         // log-moneyness, increasing; 6 or more, or none
  std::vector<double> coefficients;  // total variance; knots.size() - 2 of them

  bool empty() const { return coefficients.empty(); }
  // What is wrong with it, if anything.
  std::optional<std::string> problem() const;
};

// Total variance added at k, and its derivatives in k.
struct OverlayPoint {
  double u, du_dk, d2u_dk2;
};
OverlayPoint overlay_at(const Overlay& overlay, double k);

// What u(k) and its derivatives are made of: coefficients first .. first + 3 times these.
struct BasisPoint {
  std::ptrdiff_t first;
  std::array<double, 4> value, slope, curvature;
};
BasisPoint basis_at(const std::vector<double>& knots, double k);

}  // namespace duskgrid::surface
