// Vector functions that the tables of American premiums share, a lane a case. Never fused, so that
// every width gives the same bits. Included for each SIMD target, as invert_kernel-inl.h is.

// Per-target include guard, as Highway asks of such files.
#if defined(DUSKGRID_PRICING_AMERICAN_KERNEL_INL_H_) == defined(HWY_TARGET_TOGGLE)
#ifdef DUSKGRID_PRICING_AMERICAN_KERNEL_INL_H_
#undef DUSKGRID_PRICING_AMERICAN_KERNEL_INL_H_
#else
#define DUSKGRID_PRICING_AMERICAN_KERNEL_INL_H_
#endif

#include <hwy/highway.h>

#include "pricing/invert_kernel-inl.h"

HWY_BEFORE_NAMESPACE();
namespace duskgrid::pricing {
namespace HWY_NAMESPACE {

// Eight lanes or as many as the machine has: the same bits either way.
using PanelTag = hn::CappedTag<double, 8>;
using V = hn::Vec<PanelTag>;

HWY_INLINE V number(double v) { return hn::Set(PanelTag(), v); }

// e^x for |x| <= 708, held there beyond: 2^k e^r, |r| <= ln(2)/2, the series to r^12 (next term
// 2e-16).
HWY_INLINE V exponential(V x) {
  static constexpr double kSeries[] = {1.0,
                                       1.0,
                                       1.0 / 2,
                                       1.0 / 6,
                                       1.0 / 24,
                                       1.0 / 120,
                                       1.0 / 720,
                                       1.0 / 5040,
                                       1.0 / 40320,
                                       1.0 / 362880,
                                       1.0 / 3628800,
                                       1.0 / 39916800,
                                       1.0 / 479001600};
  const PanelTag d;
  const hn::RebindToUnsigned<PanelTag> du;
  const auto held = hn::Min(hn::Max(x, number(-708.0)), number(708.0));
  const auto k = hn::Round(held * number(1.4426950408889634));
  const auto r =
      (held - k * number(6.93147180369123816490e-01)) - k * number(1.90821492927058770002e-10);
  const auto scale =
      hn::BitCast(d, hn::ShiftLeft<52>(hn::BitCast(du, k + number(4503599627370496.0 + 1023.0))));
  return polynomial(d, r, kSeries) * scale;
}

// e^{-z^2/2} / sqrt(2 pi).
HWY_INLINE V density(V z) {
  return number(0.3989422804014326779) * exponential(number(-0.5) * (z * z));
}

// N(z), given its density.
HWY_INLINE V cumulative(V z, V n) {
  const PanelTag d;
  const auto tail = n * mills<false>(d, hn::Neg(hn::Abs(z)));
  return hn::IfThenElse(z > number(0.0), number(1.0) - tail, tail);
}

}  // namespace HWY_NAMESPACE
}  // namespace duskgrid::pricing
HWY_AFTER_NAMESPACE();

#endif  // per-target include guard
