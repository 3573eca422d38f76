// The overlay of one slice: a cubic B-spline in log-moneyness added to the backbone's total
// volatility. How it is fitted: fit.h.
#pragma once

#include <array>
#include <cstddef>
#include <optional>
#include <string>
#include <vector>

namespace duskgrid::surface {

// u(k) = sum of coefficients[i] B_i(k), B_i the cubic B-spline on knots[i .. i+4] (C. de Boor,
// A Practical Guide to Splines, 1978). Only functions whose whole support lies between the first
// and the last knot take part, so u and its first two derivatives are continuous everywhere and 0
// at and beyond the ends.
struct Overlay {
  std::vector<double> knots;         // log-moneyness, increasing; 5 or more, or none
  std::vector<double> coefficients;  // total volatility; knots.size() - 4 of them

  bool empty() const { return coefficients.empty(); }
  // What is wrong with it, if anything.
  std::optional<std::string> problem() const;
};

// Total volatility added at k, and its derivatives in k.
struct OverlayPoint {
  double u, du_dk, d2u_dk2;
};
OverlayPoint overlay_at(const Overlay& overlay, double k);

// The four B-splines that may differ from 0 on [knots[interval], knots[interval + 1]], and their
// derivatives, at k there: functions first .. first + 3, of which those below 0 or past the last
// coefficient do not exist (their values are 0).
struct BasisPoint {
  std::ptrdiff_t first;
  std::array<double, 4> value, slope, curvature;
};
BasisPoint basis_at(const std::vector<double>& knots, double k);

}  // namespace duskgrid::surface
