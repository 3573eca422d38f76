#include "arbitrage/enclosure.h"

#include <algorithm>
#include <cmath>
#include <cstddef>

namespace duskgrid::arbitrage {
namespace {

// As the overlay's own recursion does, knots are mirrored past the ends.
double knot(const std::vector<double>& knots, std::ptrdiff_t i) {
  const auto n = static_cast<std::ptrdiff_t>(knots.size());
  if (i < 0) return 2 * knots.front() - knots[static_cast<std::size_t>(-i)];
  if (i >= n) return 2 * knots.back() - knots[static_cast<std::size_t>(2 * (n - 1) - i)];
  return knots[static_cast<std::size_t>(i)];
}

Affine mixed(const Affine& a, const Affine& b, const Affine& weight) {
  return a + weight * (b - a);
}

// Taylor coefficients at the left knot, from the coefficients of the derivatives (C. de Boor, A
// Practical Guide to Splines, 1978, chapter X): those of u' are 3 (c[i] - c[i-1]) / (t[i+3] - t[i])
// and so on. At t[j] the last function of each degree is still zero.
Cubic piece_of(const surface::Overlay& overlay, std::ptrdiff_t j) {
  const auto t = [&](std::ptrdiff_t i) { return knot(overlay.knots, j + i); };
  const auto c = [&](std::ptrdiff_t i) {
    // Function number -3, the first alive, takes the first coefficient, and so do the next two.
    const auto last = static_cast<std::ptrdiff_t>(overlay.coefficients.size()) - 1;
    const auto at = std::clamp<std::ptrdiff_t>(j + i + 1, 0, last);
    return Affine(overlay.coefficients[static_cast<std::size_t>(at)]);
  };
  const auto gap = [&](std::ptrdiff_t from, std::ptrdiff_t to) {
    return Affine(t(to)) - Affine(t(from));
  };
  const Affine w31 = reciprocal(gap(-2, 1)), w32 = reciprocal(gap(-1, 2)),
               w33 = reciprocal(gap(0, 3)), w21 = reciprocal(gap(-1, 1)),
               w22 = reciprocal(gap(0, 2)), w1 = reciprocal(gap(0, 1));
  const Affine c0 = c(-3), c1 = c(-2), c2 = c(-1), c3 = c(0);
  const Affine first0 = scaled((c1 - c0) * w31, 3), first1 = scaled((c2 - c1) * w32, 3),
               first2 = scaled((c3 - c2) * w33, 3);
  const Affine second0 = scaled((first1 - first0) * w21, 2),
               second1 = scaled((first2 - first1) * w22, 2);
  const Affine inner = gap(-1, 0) * w21;
  const Affine value =
      mixed(mixed(c0, c1, gap(-2, 0) * w31), mixed(c1, c2, gap(-1, 0) * w32), inner);
  return {t(0),
          t(1),
          value,
          mixed(first0, first1, inner),
          scaled(second0, 0.5),
          (second1 - second0) * w1 * reciprocal(6.0)};
}

}  // namespace

Hyperbola Hyperbola::of(const surface::SliceParameters& s) {
  const Affine rho = s.rho, half_theta = scaled(s.theta, 0.5), half_psi = scaled(s.psi, 0.5);
  return {half_theta, rho * half_psi, 0.5 * s.psi, rho * half_theta,
          square(half_theta) * ((1.0 - rho) * (1.0 + rho))};
}

Hyperbola Hyperbola::of(const RawSlice& s) {
  const Affine b = s.b, tilt = b * s.rho;
  return {s.a - tilt * s.m, tilt, s.b, -(b * s.m), square(b * s.sigma)};
}

// w' = tilt + stretch z / root and w'' = stretch^2 breadth / root^3, z = stretch k + offset.
Form Hyperbola::at(const Affine& k) const {
  const Affine z = scaled(k, stretch) + offset;
  const Affine root = arbitrage::sqrt(square(z) + breadth);
  const Affine inverse = reciprocal(root);
  const Affine part = scaled(inverse, stretch);
  return {level + tilt * k + root, tilt + part * z, square(part) * (breadth * inverse)};
}

// With z = stretch + offset y and root = sqrt(z^2 + breadth y^2), both y times those above. Without
// stretch the root is y times a constant.
Form Hyperbola::tail(const Affine& y) const {
  if (stretch == 0)
    return {tilt + (level + arbitrage::sqrt(square(offset) + breadth)) * y, tilt, 0.0};
  const Affine z = stretch + offset * y;
  const Affine root = arbitrage::sqrt(square(z) + breadth * square(y));
  const Affine inverse = reciprocal(root);
  const Affine part = scaled(inverse, stretch), near = y * inverse;
  return {tilt + level * y + root, tilt + part * z, square(part) * (breadth * (square(y) * near))};
}

// (root - stretch) / y with the root of tail(), whose square less that of stretch is y times
// 2 stretch offset + (offset^2 + breadth) y.
Affine Hyperbola::past_slope(const Affine& y) const {
  const Affine size = square(offset) + breadth;
  if (stretch == 0) return level + arbitrage::sqrt(size);
  const Affine root = arbitrage::sqrt(square(stretch + offset * y) + breadth * square(y));
  return level + (scaled(offset, 2 * stretch) + size * y) / (root + stretch);
}

double Hyperbola::reach() const {
  const double k = (std::abs(offset.c) + std::sqrt(std::max(breadth.c, 0.0))) / stretch;
  return std::isfinite(k) && k > 0 ? k : 1;
}

// A difference of roots is that of their squares over their sum.
Affine step_at(const Hyperbola& early, const Hyperbola& late, const Affine& k) {
  const Affine a = scaled(k, early.stretch) + early.offset;
  const Affine b = scaled(k, late.stretch) + late.offset;
  const Affine apart =
      (Affine(late.stretch) - early.stretch) * k + (late.offset - early.offset);  // b - a
  const Affine roots =
      arbitrage::sqrt(square(a) + early.breadth) + arbitrage::sqrt(square(b) + late.breadth);
  return (late.level - early.level) + (late.tilt - early.tilt) * k +
         (apart * (a + b) + (late.breadth - early.breadth)) / roots;
}

std::vector<Cubic> pieces_of(const surface::Overlay& overlay) {
  std::vector<Cubic> out;
  if (overlay.empty()) return out;
  out.reserve(overlay.knots.size() - 1);
  for (std::size_t j = 0; j + 1 < overlay.knots.size(); ++j)
    out.push_back(piece_of(overlay, static_cast<std::ptrdiff_t>(j)));
  return out;
}

Form overlay_over(const Cubic& p, const Affine& k) {
  const Affine x = k - p.start;
  const Affine cubic = p.a3 * x;
  const Affine bend = scaled(p.a2, 2) + scaled(cubic, 6);
  const Affine slope = p.a1 + (scaled(p.a2, 2) + scaled(cubic, 3)) * x;
  return {p.a0 + (p.a1 + (p.a2 + cubic) * x) * x, slope, bend};
}

}  // namespace duskgrid::arbitrage
