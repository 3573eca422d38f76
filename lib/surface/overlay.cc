#include "surface/overlay.h"

#include <algorithm>
#include <cassert>
#include <cmath>

namespace duskgrid::surface {
namespace {

constexpr std::size_t kDegree = 3;

// Knots with the missing neighbours past the ends mirrored in: functions that reach there do not
// take part, but the recursion passes through them.
double knot(const std::vector<double>& knots, std::ptrdiff_t i) {
  const auto n = static_cast<std::ptrdiff_t>(knots.size());
  if (i < 0) return 2 * knots.front() - knots[static_cast<std::size_t>(-i)];
  if (i >= n) return 2 * knots.back() - knots[static_cast<std::size_t>(2 * (n - 1) - i)];
  return knots[static_cast<std::size_t>(i)];
}

}  // namespace

BasisPoint basis_at(const std::vector<double>& knots, double k) {
  assert(knots.size() > kDegree + 1);
  const auto above = std::upper_bound(knots.begin(), knots.end() - 1, k);
  const auto interval = std::max<std::ptrdiff_t>(above - knots.begin(), 1) - 1;
  std::array<double, kDegree> left{}, right{};
  for (std::size_t j = 0; j < kDegree; ++j) {
    left[j] = k - knot(knots, interval - static_cast<std::ptrdiff_t>(j));
    right[j] = knot(knots, interval + 1 + static_cast<std::ptrdiff_t>(j)) - k;
  }
  // Values of the functions of degree 0, 1, 2, 3 that are alive here, by the recursion of Cox and
  // de Boor; those of degree 1 and 2 also give the derivatives of the cubic ones.
  std::array<std::array<double, 4>, 4> n{};
  n[0][0] = 1;
  for (std::size_t d = 1; d <= kDegree; ++d) {
    double saved = 0;
    for (std::size_t r = 0; r < d; ++r) {
      const double part = n[d - 1][r] / (right[r] + left[d - 1 - r]);
      n[d][r] = saved + right[r] * part;
      saved = left[d - 1 - r] * part;
    }
    n[d][d] = saved;
  }
  const auto width = [&](std::size_t d, std::size_t r) { return right[r] + left[d - 1 - r]; };
  // Derivatives lower the degree: B' of degree d is d (N_r / width_r - N_r+1 / width_r+1).
  const auto lowered = [&](const std::array<double, 4>& lower, std::size_t d) {
    std::array<double, 4> out{};
    for (std::size_t r = 0; r <= d; ++r) {
      const double before = r > 0 ? lower[r - 1] / width(d, r - 1) : 0;
      const double after = r < d ? lower[r] / width(d, r) : 0;
      out[r] = static_cast<double>(d) * (before - after);
    }
    return out;
  };
  BasisPoint point{interval - static_cast<std::ptrdiff_t>(kDegree), n[3], lowered(n[2], 3),
                   lowered(lowered(n[1], 2), 3)};
  const auto count = static_cast<std::ptrdiff_t>(knots.size()) - 4;
  for (std::size_t r = 0; r < 4; ++r) {
    const auto i = point.first + static_cast<std::ptrdiff_t>(r);
    if (i >= 0 && i < count) continue;
    point.value[r] = point.slope[r] = point.curvature[r] = 0;
  }
  return point;
}

OverlayPoint overlay_at(const Overlay& overlay, double k) {
  if (overlay.empty() || !(k > overlay.knots.front()) || !(k < overlay.knots.back()))
    return {0, 0, 0};
  const BasisPoint basis = basis_at(overlay.knots, k);
  OverlayPoint point{0, 0, 0};
  const auto count = static_cast<std::ptrdiff_t>(overlay.coefficients.size());
  for (std::size_t r = 0; r < 4; ++r) {
    const auto i = basis.first + static_cast<std::ptrdiff_t>(r);
    if (i < 0 || i >= count) continue;
    const double c = overlay.coefficients[static_cast<std::size_t>(i)];
    point.u += c * basis.value[r];
    point.du_dk += c * basis.slope[r];
    point.d2u_dk2 += c * basis.curvature[r];
  }
  return point;
}

std::optional<std::string> Overlay::problem() const {
  if (knots.empty() && coefficients.empty()) return std::nullopt;
  if (knots.size() < kDegree + 2 || coefficients.size() != knots.size() - kDegree - 1)
    return "an overlay has 5 knots or more, and 4 fewer coefficients";
  for (std::size_t i = 0; i < knots.size(); ++i)
    if (!std::isfinite(knots[i]) || (i > 0 && !(knots[i] > knots[i - 1])))
      return "the knots of an overlay increase";
  if (!std::all_of(coefficients.begin(), coefficients.end(),
                   [](double c) { return std::isfinite(c); }))
    return "a coefficient of an overlay is not a number";
  return std::nullopt;
}

}  // namespace duskgrid::surface
