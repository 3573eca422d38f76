// The inversion, written once for any vector of doubles: included for each SIMD target by
// invert_batch.cc, and with one lane by invert.cc. Its operations are multiplications, additions,
// divisions and square roots of IEEE 754 in a fixed order and never fused, so every width gives the
// same bits.
//
// Normalised price b(x, s), x = ln(F/K) <= 0, is inverted for s by steps of Householder's third
// order on ln b, or on ln of the distance from the bound in the upper half. With
// Y = N / n (distribution over density), h = x/s and t = s/2,
//   b = e^{-(h^2+t^2)/2} (Y(h+t) - Y(h-t)) / sqrt(2 pi),
//   e^{x/2} - b = e^{-(h^2+t^2)/2} (Y(-h-t) + Y(h-t)) / sqrt(2 pi),
// so that a step needs two Y and one logarithm. P. Jaeckel, "Let's be rational", Wilmott (2015)
// describes the normalisation and the steps; the guess and the forms above are this project's.

// Per-target include guard, as Highway asks of such files.
#if defined(DUSKGRID_PRICING_INVERT_KERNEL_INL_H_) == defined(HWY_TARGET_TOGGLE)
#ifdef DUSKGRID_PRICING_INVERT_KERNEL_INL_H_
#undef DUSKGRID_PRICING_INVERT_KERNEL_INL_H_
#else
#define DUSKGRID_PRICING_INVERT_KERNEL_INL_H_
#endif

#include <hwy/highway.h>

#include <cstddef>
#include <cstdint>

HWY_BEFORE_NAMESPACE();
namespace duskgrid::pricing {
namespace HWY_NAMESPACE {
namespace hn = hwy::HWY_NAMESPACE;

// c[0] + c[1] t + ... in four interleaved chains, so that no chain is long.
template <class D, std::size_t N>
HWY_INLINE hn::Vec<D> polynomial(D d, hn::Vec<D> t, const double (&c)[N]) {
  static_assert(N >= 8);
  const auto t2 = t * t;
  const auto t4 = t2 * t2;
  hn::Vec<D> chain[4];
  for (std::size_t j = 0; j < 4; ++j) {
    const std::size_t last = j + (N - 1 - j) / 4 * 4;
    chain[j] = hn::Set(d, c[last]);
    for (std::size_t i = last; i >= j + 4; i -= 4) chain[j] = chain[j] * t4 + hn::Set(d, c[i - 4]);
  }
  return (chain[0] + chain[1] * t) + (chain[2] + chain[3] * t) * t2;
}

// (m, e) with v = m 2^e and m in [sqrt(1/2), sqrt(2)), for normal v > 0.
template <class D>
HWY_INLINE void split(D d, hn::Vec<D> v, hn::Vec<D>& m, hn::Vec<D>& e) {
  const hn::RebindToUnsigned<D> du;
  constexpr std::uint64_t kRootHalf = 0x3FE6A09E667F3BCDull, kOne = 0x3FF0000000000000ull;
  constexpr std::uint64_t kMantissa = 0x000FFFFFFFFFFFFFull, kTwo52 = 0x4330000000000000ull;
  const auto shifted = hn::BitCast(du, v) + hn::Set(du, kOne - kRootHalf);
  m = hn::BitCast(d, hn::And(shifted, hn::Set(du, kMantissa)) + hn::Set(du, kRootHalf));
  // A small whole number in the last bits of 2^52 is that number above it.
  const auto whole = hn::Or(hn::ShiftRight<52>(shifted), hn::Set(du, kTwo52));
  e = hn::BitCast(d, whole) - hn::Set(d, 4503599627370496.0 + 1023.0);
}

// ln((1 + f) 2^e) for f in [sqrt(1/2) - 1, sqrt(2) - 1]. With s = f / (2 + f),
// ln(1 + f) = 2 s + s R(s^2); R fitted to 5e-18.
template <class D>
HWY_INLINE hn::Vec<D> log_of_parts(D d, hn::Vec<D> f, hn::Vec<D> e) {
  const auto s = f / (hn::Set(d, 2.0) + f);
  const auto z = s * s;
  const auto z2 = z * z;
  const auto odd =
      (hn::Set(d, 0.66666666666666696) + z2 * hn::Set(d, 0.2857142862600327)) +
      (z2 * z2) * (hn::Set(d, 0.18182889455674947) + z2 * hn::Set(d, 0.14616585424888623));
  const auto even = hn::Set(d, 0.39999999999899444) +
                    z2 * (hn::Set(d, 0.22222211130259878) + z2 * hn::Set(d, 0.15331710618210773));
  const auto r = z * odd + z2 * even;
  const auto half_square = hn::Set(d, 0.5) * f * f;
  // ln 2 in two parts, the first exact when multiplied by an exponent.
  const auto high = e * hn::Set(d, 6.93147180369123816490e-01);
  const auto low = e * hn::Set(d, 1.90821492927058770002e-10);
  return high - ((half_square - (s * (half_square + r) + low)) - f);
}

template <class D>
HWY_INLINE hn::Vec<D> log(D d, hn::Vec<D> v) {
  hn::Vec<D> m, e;
  split(d, v, m, e);
  return log_of_parts(d, m - hn::Set(d, 1.0), e);
}

// ln(low / high) <= 0 of positive numbers, accurate also where they nearly agree.
template <class D>
HWY_INLINE hn::Vec<D> log_ratio(D d, hn::Vec<D> low, hn::Vec<D> high) {
  const auto ratio = low / high;
  hn::Vec<D> m, e;
  split(d, ratio, m, e);
  const auto near = ratio > hn::Set(d, 0.70710678118654757);
  const auto f = hn::IfThenElse(near, (low - high) / high, m - hn::Set(d, 1.0));
  return log_of_parts(d, f, hn::IfThenElseZero(hn::Not(near), e));
}

// Y(z) = N(z) / n(z) for z <= 1.1, which is sqrt(pi/2) erfcx(-z / sqrt 2). With c = 3.5 sqrt 2 and
// v = 1 / (c - z), Y / v is a polynomial in (-z - 1.9 sqrt 2) v to 1e-16 (the form of M. Shepherd,
// J. Laframboise, Math. Comp. 36 (1981) 249-253, refitted to begin at z = 1.13). Relative error
// below 3 ulp for z <= 0; rough: 2e-6, for a step that another will correct.
template <bool kRough, class D>
HWY_INLINE hn::Vec<D> mills(D d, hn::Vec<D> z) {
  static constexpr double kRatio[] = {
      2.5508280545048634,      -3.4261802670553347,     3.6548521015386166,
      -3.0821182901895403,     1.9989954687917777,      -0.92597715169724526,
      0.23848890266510611,     0.022819145733478947,    -0.042561294509352372,
      0.0077506190783526606,   0.0056389818805286877,   -0.0022114555100353922,
      -0.00086296152897251421, 0.00047691050508034955,  0.00017818350201742684,
      -9.5210604384416312e-05, -4.7001249552938887e-05, 1.6706265672949581e-05,
      1.3473923714176578e-05,  -1.9789484261615041e-06, -3.6612062536207302e-06,
      -6.2275888556482923e-08, 8.4013896571936159e-07,  8.7435160705597662e-08,
      -1.3977223978730231e-07, -1.3661589958672174e-08, 1.2245480511420357e-08};
  static constexpr double kRoughRatio[] = {
      2.5508280545048634,    -3.4261938069146836,   3.6548463936323383,   -3.0818444628657695,
      1.9991106437330097,    -0.92755484812950395,  0.23782903496755101,  0.026637436984749952,
      -0.040981198680567099, 0.0034357231103890841, 0.0038884766253538447};
  const auto v = hn::Set(d, 1.0) / (hn::Set(d, 4.9497474683058327) - z);
  const auto u = hn::Neg(z + hn::Set(d, 2.6870057685088806)) * v;
  if constexpr (kRough) return polynomial(d, u, kRoughRatio) * v;
  return polynomial(d, u, kRatio) * v;
}

// Sums of the odd terms of d_{m+1} = (x/2 d_m + t^2 d_{m-1}) / (m + 1) from two starts at once:
// (0, t) and (1, x/2).
template <class D>
struct SeriesTerms {
  D d;
  hn::Vec<D> half_x, t2;
  hn::Vec<D> before, now, sum;        // from (0, t)
  hn::Vec<D> before_y, now_y, sum_y;  // from (1, x/2)
  // Terms of orders kFirst + 2 to kLast.
  template <int kFirst, int kLast>
  HWY_INLINE void add() {
    for (int m = kFirst + 1; m < kLast; m += 2) {
      const auto even = hn::Set(d, 1.0 / m), odd = hn::Set(d, 1.0 / (m + 1));
      const auto x_even = half_x * even, t_even = t2 * even, x_odd = half_x * odd, t_odd = t2 * odd;
      before = x_even * now + t_even * before;
      before_y = x_even * now_y + t_even * before_y;
      now = x_odd * before + t_odd * now;
      now_y = x_odd * before_y + t_odd * now_y;
      sum = sum + now;
      sum_y = sum_y + now_y;
    }
  }
  // Takes back what add() did in lanes where `kept`.
  HWY_INLINE void keep(hn::Mask<D> kept, hn::Vec<D> old_sum, hn::Vec<D> old_sum_y) {
    sum = hn::IfThenElse(kept, old_sum, sum);
    sum_y = hn::IfThenElse(kept, old_sum_y, sum_y);
  }
};

// Largest t = s/2 of the series below, with |x| < 1.
inline constexpr double kSeriesHalfVol = 0.6;

// Y(h+t) - Y(h-t) near the money, where the difference would cancel: twice its odd Taylor terms in
// t, d_m = Y^(m)(h) t^m / m!, which begin with Y(h) and t (1 + h Y(h)) and obey the recurrence
// above (from Y' = 1 + h Y). It is linear, so all but Y(h) itself is summed before Y(h) is known.
// Up to order 11 for t < 0.1, 17 for t < 0.3, else 23: the first left out is below 1e-17 of the
// sum. What a lane gets does not depend on the others.
template <bool kRough, class D>
HWY_INLINE hn::Vec<D> mills_difference(D d, hn::Vec<D> x, hn::Vec<D> h, hn::Vec<D> t) {
  const auto half_x = hn::Set(d, 0.5) * x;
  SeriesTerms<D> terms{d, half_x, t * t, hn::Zero(d), t, t, hn::Set(d, 1.0), half_x, half_x};
  if constexpr (kRough) {
    terms.template add<1, 7>();
  } else {
    terms.template add<1, 11>();
    const auto small = t < hn::Set(d, 0.1);
    if (!hn::AllTrue(d, small)) {
      const auto sum = terms.sum, sum_y = terms.sum_y;
      terms.template add<11, 17>();
      const auto middle = t < hn::Set(d, 0.3);
      if (!hn::AllTrue(d, middle)) {
        const auto longer = terms.sum, longer_y = terms.sum_y;
        terms.template add<17, 23>();
        terms.keep(middle, longer, longer_y);
      }
      terms.keep(small, sum, sum_y);
    }
  }
  const auto half = terms.sum + mills<kRough>(d, h) * terms.sum_y;
  return half + half;
}

// A guess of s in the lower half from r = k / (sqrt(2 pi) b), k = |x|, and its logarithm. The
// normal (Bachelier) model has r = d / (sqrt(2 pi) psi(d)) with d = k/s, psi(d) = n(d) - d N(-d):
// its inverse is fitted to 1e-5 on either side of r = 0.56, d / r in r and d / w in 1 / w with
// w = sqrt(ln r + 2). To first order in t^2 = s^2/4 the logarithm of the Black price is lower by
// what raises s by t^2 (1 - d^2 psi(d) / n(d)) / 6, fitted to 3e-3 in y = 1 / (1 + d).
template <class D>
HWY_INLINE hn::Vec<D> lower_guess(D d, hn::Vec<D> k, hn::Vec<D> r, hn::Vec<D> log_r,
                                  hn::Vec<D> at_the_money) {
  static constexpr double kNear[] = {0.999998452043, -1.25296318609, 2.05723226123, -3.63963396552,
                                     5.94709178738,  -7.50347811179, 5.97719439787, -2.15867547398};
  static constexpr double kFar[] = {1.41412394947,  -0.0292641074349, -9.8607025086,  52.6577217184,
                                    -351.821877472, 1820.29459771,    -6627.33287304, 16784.5134227,
                                    -28930.2700618, 33018.4245088,    -23824.8079515, 9842.38261982,
                                    -1775.38282927};
  static constexpr double kRise[] = {3.00194194083, 5.83190071523,  -1.00980941051, -109.825483398,
                                     315.981121454, -396.912456379, 243.384144201,  -59.4526257064};
  const auto one = hn::Set(d, 1.0);
  const auto is_near = r < hn::Set(d, 0.56);
  const auto near = polynomial(d, hn::Min(r, one), kNear);
  const auto w = hn::Sqrt(hn::Max(log_r, hn::Set(d, -0.59)) + hn::Set(d, 2.0));
  const auto far = polynomial(d, one / w, kFar) * w;
  const auto deviations = hn::IfThenElse(is_near, r * near, far);
  const auto s = hn::IfThenElse(is_near, at_the_money / near, k / far);
  const auto y = one / (one + deviations);
  const auto rise = polynomial(d, y, kRise) * (y * y);
  const auto t2 = hn::Min(hn::Set(d, 0.25) * (s * s), one);
  return s + s * (t2 * rise * hn::Set(d, 1.0 / 6.0));
}

// Upper-tail quantile of the normal distribution from T = sqrt(-2 ln q), q <= 1/2, to 5e-4:
// Abramowitz & Stegun 26.2.23.
template <class D>
HWY_INLINE hn::Vec<D> tail_quantile(D d, hn::Vec<D> T) {
  const auto top = hn::Set(d, 2.515517) + T * (hn::Set(d, 0.802853) + T * hn::Set(d, 0.010328));
  const auto bottom = hn::Set(d, 1.0) + T * (hn::Set(d, 1.432788) +
                                             T * (hn::Set(d, 0.189269) + T * hn::Set(d, 0.001308)));
  return T - top / bottom;
}

// What one inversion is asked, a lane each: x <= 0, target = b in the lower half and e^{x/2} - b in
// the upper, bound = e^{x/2}. Targets from 5e-324 up.
template <class D>
struct Problem {
  hn::Vec<D> x, target, bound;
  hn::Mask<D> upper;
};

template <class D>
class Inversion {
 public:
  using V = hn::Vec<D>;
  using M = hn::Mask<D>;

  HWY_INLINE Inversion(D d, const Problem<D>& problem)
      : d_(d), x_(problem.x), k_(hn::Neg(problem.x)), upper_(problem.upper) {
    // Tiny targets are lifted by 2^64, which the logarithm gives back.
    const auto tiny = problem.target < number(0x1p-960);
    const auto lifted = hn::IfThenElse(tiny, problem.target * number(0x1p64), problem.target);
    lift_ = hn::IfThenElseZero(tiny, number(44.3614195558364998));
    inverse_ = number(1.0) / (number(2.5066282746310005024) * lifted);
    sign_ = hn::IfThenElse(upper_, number(-1.0), number(1.0));
    near_ = hn::AndNot(upper_, k_ < number(1.0));
    guess(problem);
  }

  HWY_INLINE V run() {
    // A step turns a relative error e into a few e^4: a last step below 5e-5 leaves rounding. One
    // is enough where the guess is good, which is where listed options are; elsewhere a rough one
    // goes before. Twelve reach from any guess. A lane that has settled moves no more, whatever its
    // neighbours still need.
    constexpr int kMostSteps = 12;
    const auto guessed = s_;
    const auto rough = hn::Or(upper_, s_ > number(0.5));
    if (!hn::AllFalse(d_, rough)) {
      step<true>();
      s_ = hn::IfThenElse(rough, s_, guessed);
    }
    auto moving = hn::Not(step<false>());
    for (int i = 1; i < kMostSteps && !hn::AllFalse(d_, moving); ++i) {
      const auto before = s_;
      const auto settled = step<false>();
      s_ = hn::IfThenElse(moving, s_, before);
      moving = hn::AndNot(settled, moving);
    }
    return s_;
  }

 private:
  HWY_INLINE V number(double v) const { return hn::Set(d_, v); }

  HWY_INLINE void guess(const Problem<D>& problem) {
    // Of the lower half ln r, of the upper ln of the share of the bound that is missing.
    const auto lifted_r = k_ * inverse_;
    const auto share = problem.target / problem.bound;
    const auto least = number(0x1p-1000);
    const auto ln = log(d_, hn::Max(hn::IfThenElse(upper_, share, lifted_r), least));
    // A lifted target made r 2^64 times too small.
    const auto is_lifted = lift_ > hn::Zero(d_);
    const auto unlift = hn::IfThenElse(is_lifted, number(0x1p-64), number(1.0));
    const auto r = hn::Min(lifted_r, number(0x1p900)) / unlift;
    const auto lower = lower_guess(d_, k_, r, ln + lift_, unlift / inverse_);
    s_ = lower;
    if (!hn::AllFalse(d_, upper_)) s_ = hn::IfThenElse(upper_, upper_guess(ln), lower);
    // d1 stays where Y is fitted.
    const auto two_k = k_ + k_;
    ceiling_ = hn::IfThenElse(upper_, number(1e3), number(1.0) + hn::Sqrt(number(1.0) + two_k));
    floor_ = hn::IfThenElse(upper_, hn::Sqrt(number(0.49) + two_k) - number(0.7), hn::Zero(d_));
    s_ = hn::Min(hn::Max(s_, floor_), ceiling_);
  }

  // The missing share is N(-d1) (1 + rho) with rho = Y(d2) / Y(-d1), and d2^2 = d1^2 + 2k.
  HWY_INLINE V upper_guess(V log_share) const {
    const auto two_k = k_ + k_;
    const auto minus_two = number(-2.0);
    auto z = tail_quantile(
        d_, hn::Sqrt(minus_two * hn::Min(log_share - number(0.6931471805599453), number(-0.7))));
    const auto rho = (number(0.8) + z) / (number(0.8) + hn::Sqrt(z * z + two_k));
    const auto log_sum = rho * (number(1.0) - number(0.3068528194400547) * rho);
    z = tail_quantile(d_, hn::Sqrt(minus_two * hn::Min(log_share - log_sum, number(-0.7))));
    return z + hn::Sqrt(z * z + two_k);
  }

  // Y(h+t) - Y(h-t), or Y(-h-t) + Y(h-t) in the upper half.
  template <bool kRough>
  HWY_INLINE V price_over_vega(V h, V t) const {
    const auto series = hn::And(near_, t < number(kSeriesHalfVol));
    if (hn::AllTrue(d_, series)) return mills_difference<kRough>(d_, x_, h, t);
    const auto plain = mills<kRough>(d_, sign_ * (h + t)) - sign_ * mills<kRough>(d_, h - t);
    if (hn::AllFalse(d_, series)) return plain;
    return hn::IfThenElse(series, mills_difference<kRough>(d_, x_, h, t), plain);
  }

  // One step; tells which lanes have moved by next to nothing.
  template <bool kRough>
  HWY_INLINE M step() {
    const auto one = number(1.0), half = number(0.5);
    const auto inverse_s = one / s_;
    const auto h = x_ * inverse_s, t = half * s_;
    const auto h2 = h * h, t2 = t * t;
    const auto q = price_over_vega<kRough>(h, t);
    const auto f = log(d_, q * inverse_) - (half * (h2 + t2) - lift_);
    // f' = sign / q and nu = -f / f'; with b2, b3 the second and third derivatives of b over its
    // first, nu f''/f' = nu b2 + f and nu^2 times the third of f over f' is
    // nu^2 b3 + 3 f nu b2 + 2 f^2.
    // All in units of s, so that nothing overflows for the smallest.
    const auto nu = hn::Neg(f) * sign_ * (q * inverse_s);
    const auto b2 = h2 - t2;
    const auto b3 = b2 * b2 - (number(3.0) * h2 + t2);
    const auto nu_b2 = nu * b2;
    const auto second = nu_b2 + f;
    const auto third = nu * nu * b3 + f * (number(3.0) * nu_b2 + (f + f));
    const auto top = nu * (one + half * second);
    const auto bottom = one + (second + third * number(1.0 / 6.0));
    auto moved = s_ + s_ * (top / bottom);
    // Where the step is no step (a pole, a far guess): a fifth or five times, within bounds.
    const auto low = hn::Max(s_ * number(0.2), floor_);
    const auto high = hn::Min(s_ * number(5.0), ceiling_);
    moved = hn::Min(hn::IfThenElse(moved > low, moved, low), high);
    const auto settled = hn::Abs(moved - s_) <= number(5e-5) * moved;
    s_ = moved;
    return settled;
  }

  D d_;
  V x_, k_;
  M upper_, near_;
  V lift_, inverse_, sign_, s_, floor_, ceiling_;
};

// Total volatility s of normalised prices 0 < beta < bound = e^{x/2}, x <= 0.
template <class D>
HWY_INLINE hn::Vec<D> invert(D d, hn::Vec<D> x, hn::Vec<D> beta, hn::Vec<D> bound) {
  Problem<D> problem;
  problem.x = x;
  problem.bound = bound;
  problem.upper = beta > hn::Set(d, 0.5) * bound;
  problem.target = hn::IfThenElse(problem.upper, bound - beta, beta);
  return Inversion<D>(d, problem).run();
}

// What the contracts of a column share, as vectors; all finite and > 0.
template <class D>
struct Shared {
  hn::Vec<D> forward, root_forward, discount, inverse_root_t;
  HWY_INLINE Shared(D d, double f, double discount_factor, double year_fraction)
      : forward(hn::Set(d, f)),
        root_forward(hn::Sqrt(hn::Set(d, f))),
        discount(hn::Set(d, discount_factor)),
        inverse_root_t(hn::Set(d, 1.0) / hn::Sqrt(hn::Set(d, year_fraction))) {}
};

// Volatilities of prices; sign is 1 for calls and -1 for puts. Returns the vol, 0 where there is
// none, and the number of the VolStatus that says why.
template <class D>
HWY_INLINE hn::Vec<D> invert_prices(D d, const Shared<D>& shared, hn::Vec<D> strike,
                                    hn::Vec<D> sign, hn::Vec<D> price, hn::Vec<D>& status) {
  const auto zero = hn::Zero(d), one = hn::Set(d, 1.0);
  const auto largest = hn::Set(d, 1.7976931348623157e308);
  const auto is_number =
      hn::And(hn::And(strike > zero, strike <= largest), hn::Abs(price) <= largest);
  const auto forward = shared.forward;
  // Strike and forward so far apart that their ratio is no normal number have no answer either.
  const auto given = hn::IfThenElse(is_number, strike, forward);
  const auto ratio = hn::Min(forward, given) / hn::Max(forward, given);
  const auto finite = hn::And(is_number, ratio >= hn::Set(d, 0x1p-1022));
  // Lanes without an answer go on with an easy question of their own.
  const auto k = hn::IfThenElse(finite, strike, forward);
  const auto low = hn::Min(forward, k), high = hn::Max(forward, k);
  const auto intrinsic = shared.discount * hn::Max(zero, sign * (forward - k));
  const auto time_value = hn::IfThenElse(finite, price, zero) - intrinsic;
  const auto limit = shared.discount * hn::IfThenElse(sign > zero, forward, k);
  const auto beta = time_value / (shared.discount * shared.root_forward * hn::Sqrt(k));
  const auto bound = hn::Sqrt(low / high);
  // No total volatility below the normal doubles is told apart: less is intrinsic value.
  const auto below = beta < hn::Set(d, 0x1p-1022);
  const auto above = hn::Or(price >= limit, beta >= bound);
  const auto ok = hn::AndNot(hn::Or(below, above), hn::And(finite, beta < bound));
  const auto sound = hn::IfThenElse(ok, beta, hn::Set(d, 0.25) * bound);
  const auto s = invert(d, hn::Min(log_ratio(d, low, high), zero), sound, bound);
  // The order of VolStatus: ok, below_intrinsic, above_bound, not_finite.
  const auto reason = hn::IfThenElse(below, one, hn::IfThenElse(above, one + one, zero));
  status = hn::IfThenElse(finite, reason, hn::Set(d, 3.0));
  return hn::IfThenElseZero(ok, s * shared.inverse_root_t);
}

}  // namespace HWY_NAMESPACE
}  // namespace duskgrid::pricing
HWY_AFTER_NAMESPACE();

#endif  // per-target include guard
