#include "surface/overlay.h"

#include <algorithm>
#include <cassert>
#include <cmath>

namespace duskgrid::surface {
namespace {

constexpr std::size_t kDegree = 3;
constexpr std::size_t kLeastKnots = 6;

// Knots, mirrored past the ends.
double knot(const std::vector<double>& knots, std::ptrdiff_t i) {
  const auto n = static_cast<std::ptrdiff_t>(knots.size());
  if (i < 0) return 2 * knots.front() - knots[static_cast<std::size_t>(-i)];
  if (i >= n) return 2 * knots.back() - knots[static_cast<std::size_t>(2 * (n - 1) - i)];
  return knots[static_cast<std::size_t>(i)];
}

}  // namespace

BasisPoint basis_at(const std::vector<double>& knots, double k) {
  assert(knots.size() >= kLeastKnots);
  const auto end = static_cast<std::ptrdiff_t>(knots.size()) - 2;  // coefficients
  if (!(k > knots.front())) return {0, {1}, {}, {}};
  if (!(k < knots.back())) return {end - 4, {0, 0, 0, 1}, {}, {}};
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
  // The function r here is the one that starts at knot interval - 3 + r, which takes the
  // coefficient one further on, or the nearest there is.
  const std::array<std::array<double, 4>, 3> alive{n[3], lowered(n[2], 3),
                                                   lowered(lowered(n[1], 2), 3)};
  const auto last = static_cast<std::ptrdiff_t>(knots.size()) - 3;
  BasisPoint point{std::clamp<std::ptrdiff_t>(interval - 2, 0, last - 3), {}, {}, {}};
  for (std::size_t r = 0; r < 4; ++r) {
    const auto i =
        std::clamp<std::ptrdiff_t>(interval - 2 + static_cast<std::ptrdiff_t>(r), 0, last);
    const auto at = static_cast<std::size_t>(i - point.first);
    point.value[at] += alive[0][r];
    point.slope[at] += alive[1][r];
    point.curvature[at] += alive[2][r];
  }
  return point;
}

OverlayPoint overlay_at(const Overlay& overlay, double k) {
  if (overlay.empty()) return {0, 0, 0};
  const BasisPoint basis = basis_at(overlay.knots, k);
  OverlayPoint point{0, 0, 0};
  for (std::size_t r = 0; r < 4; ++r) {
    const double c = overlay.coefficients[static_cast<std::size_t>(basis.first) + r];
    point.u += c * basis.value[r];
    point.du_dk += c * basis.slope[r];
    point.d2u_dk2 += c * basis.curvature[r];
  }
  return point;
}

std::optional<std::string> Overlay::problem() const {
  if (knots.empty() && coefficients.empty()) return std::nullopt;
  if (knots.size() < kLeastKnots || coefficients.size() != knots.size() - 2)
    return "an overlay has 6 knots or more, and 2 fewer coefficients";
  for (std::size_t i = 0; i < knots.size(); ++i)
    if (!std::isfinite(knots[i]) || (i > 0 && !(knots[i] > knots[i - 1])))
      return "the knots of an overlay increase";
  if (!std::all_of(coefficients.begin(), coefficients.end(),
                   [](double c) { return std::isfinite(c); }))
    return "a coefficient of an overlay is not a number";
  return std::nullopt;
}

}  // namespace duskgrid::surface
