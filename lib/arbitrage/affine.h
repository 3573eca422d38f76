// Affine arithmetic with one noise symbol: a number known as c + d xi +- e for one xi in [-1, 1]
// shared by all numbers of a computation. J. Comba, J. Stolfi, "Affine arithmetic and its
// applications to computer graphics", SIBGRAPI 1993; L. H. de Figueiredo, J. Stolfi, "Affine
// arithmetic: concepts and applications", Numerical Algorithms 37 (2004) 147-158.
//
// With xi the place within a range of k, every result encloses the exact value at every place of
// that range, and its width beyond the slope d falls with the square of the range.
//
// Rounding. In round-to-nearest a sum, product, quotient or root x computed as y errs by at most
// u |y|, u = 2^-53, and by 2^-1075 where it underflows. Each operation below adds these errors to
// e, plus kTiny, which is far above any underflow. e is itself computed by fewer than 12 operations
// on non-negative numbers, each too low by a factor of at least 1 - u; the factor kUp = 1 + 32 u
// makes up for them. No rounding mode is set or assumed but the default one. An infinite or
// undefined result always has an infinite or undefined e, of which no comparison proves anything.
#pragma once

#include <algorithm>
#include <cfloat>
#include <cmath>
#include <limits>

namespace duskgrid::arbitrage {

// Every operation rounds to a double, to nearest.
static_assert(std::numeric_limits<double>::is_iec559 && FLT_EVAL_METHOD == 0);
static_assert(std::numeric_limits<double>::round_style == std::round_to_nearest);

namespace affine_rounding {
inline constexpr double kUnit = std::numeric_limits<double>::epsilon() / 2;  // u
inline constexpr double kUp = 1 + 32 * kUnit;
inline constexpr double kTiny = 0x1p-1000;

// At or below / above every real that rounds to x: S. Rump, P. Zimmermann, S. Boldo, G. Melquiond,
// "Computing predecessor and successor in rounding to nearest", BIT 49 (2009) 419-431.
inline double below(double x) {
  return x - (kUnit * (1 + 4 * kUnit) * std::abs(x) + std::numeric_limits<double>::denorm_min());
}
inline double above(double x) { return -below(-x); }
}  // namespace affine_rounding

struct Affine {
  double c = 0, d = 0, e = 0;

  constexpr Affine() = default;
  // A double is an exact number, unless it is infinite or none: then e is not a number.
  constexpr Affine(double exact) : c(exact), e(exact - exact) {}  // NOLINT: implicit
  constexpr Affine(double centre, double slope, double error) : c(centre), d(slope), e(error) {}

  // Every real of [low, high]; xi says where.
  static Affine range(double low, double high) {
    const double middle = low + 0.5 * (high - low);
    const double reach = std::max(high - middle, middle - low) * affine_rounding::kUp;
    return {middle, reach + affine_rounding::kTiny, 0};
  }

  // Bounds over all xi, and at xi = 0.
  double lower() const { return affine_rounding::below(c - margin(std::abs(d) + e)); }
  double upper() const { return affine_rounding::above(c + margin(std::abs(d) + e)); }
  double lower_at_centre() const { return affine_rounding::below(c - e); }
  double upper_at_centre() const { return affine_rounding::above(c + e); }

  Affine operator-() const { return {-c, -d, e}; }

 private:
  static double margin(double x) { return x * affine_rounding::kUp; }
};

inline Affine operator+(const Affine& a, const Affine& b) {
  using namespace affine_rounding;
  const double c = a.c + b.c, d = a.d + b.d;
  return {c, d, ((a.e + b.e) + (kUnit * (std::abs(c) + std::abs(d)) + kTiny)) * kUp};
}

inline Affine operator-(const Affine& a, const Affine& b) { return a + -b; }

// The square of xi lies in [0, 1], so that d1 d2 xi^2 is half of d1 d2, give or take the same. With
// A = |c1| + |d1| and B alike, the parts c1 c2, c1 d2, c2 d1, d1 d2 add up to A B in size; each is
// rounded once and added once: 2 u (1 + u) A B at most, for which 3 u A B is taken.
inline Affine operator*(const Affine& a, const Affine& b) {
  using namespace affine_rounding;
  const double bend = 0.5 * (a.d * b.d);
  const double size_a = std::abs(a.c) + std::abs(a.d), size_b = std::abs(b.c) + std::abs(b.d);
  return {a.c * b.c + bend, a.c * b.d + a.d * b.c,
          ((size_a * b.e + (size_b + b.e) * a.e) +
           (std::abs(bend) + 3 * kUnit * (size_a * size_b) + kTiny)) *
              kUp};
}

// By an exact number.
inline Affine scaled(const Affine& a, double factor) {
  using namespace affine_rounding;
  const double c = a.c * factor, d = a.d * factor;
  return {c, d, (a.e * std::abs(factor) + (kUnit * (std::abs(c) + std::abs(d)) + kTiny)) * kUp};
}

inline Affine square(const Affine& a) { return a * a; }

// 1 / (c (1 + t)) with |t| <= s < 1: 1 / (1 + t) = 1 - t + t^2 / (1 + t), of which the last term
// lies in [0, s^2 / (1 - s)]. r = 1 / c is off by u |r|, and every part below by at most 4 u of its
// size, which together is at most |r| (1 + s + rest): 8 u of it is taken. Unbounded if s >= 1.
inline Affine reciprocal(const Affine& a) {
  using namespace affine_rounding;
  const double r = 1 / a.c, size = std::abs(r);
  const double s = (std::abs(a.d) + a.e) * size * kUp;
  const double rest = s * s / (1 - s) * kUp;
  const double error =
      (size * (size * a.e * kUp + 0.5 * rest + 8 * kUnit * (1 + s + rest)) + kTiny) * kUp;
  return {r * (1 + 0.5 * rest), -(r * a.d) * r,
          s < 1 ? error : std::numeric_limits<double>::infinity()};
}

inline Affine operator/(const Affine& a, const Affine& b) { return a * reciprocal(b); }

// sqrt(c (1 + t)) with |t| <= s < 1: sqrt(1 + t) = 1 + t / 2 - (t^2 / 4) / (1 + t / 2 + sqrt(1 +
// t)), and the last term lies in [0, s^2 / (8 - 6 s)], since its denominator is least at t = -s,
// where sqrt(1 - s) >= 1 - s. Rounding as in reciprocal(). Unbounded if s >= 1.
inline Affine sqrt(const Affine& a) {
  using namespace affine_rounding;
  const double root = std::sqrt(a.c);
  const double half = 0.5 / root;  // d root / d c
  const double s = 4 * half * (half * (std::abs(a.d) + a.e)) * kUp;
  const double rest = s * s / (8 - 6 * s) * kUp;
  const double error =
      (half * a.e * kUp + root * (0.5 * rest + 8 * kUnit * (1 + s + rest)) + kTiny) * kUp;
  return {root * (1 - 0.5 * rest), half * a.d,
          s < 1 ? error : std::numeric_limits<double>::infinity()};
}

}  // namespace duskgrid::arbitrage
