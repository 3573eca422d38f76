// What follows from a surface at a point: density, local variance, price and Greeks; and at a time
// the strike of a variance swap. All in closed form from the surface's own derivatives, the swap by
// one quadrature. Nothing here smooths or repairs: a surface with arbitrage shows it.
#pragma once

#include <optional>

#include "pricing/black.h"
#include "surface/surface.h"

namespace duskgrid::surface {

// Density of ln(S_t / F) under the forward measure, per unit of k: g n(d2) / sqrt(w) with
// Durrleman's g; J. Gatheral, A. Jacquier, Quantitative Finance 14 (2014) 59-71, section 2.2.
// Negative where there is butterfly arbitrage. Nothing where w is not above 0 or the numbers leave
// their range.
std::optional<double> log_density(const SurfacePoint& point, double k);

// Local variance, a year: dw/dt over g (B. Dupire, Risk 7(1) (1994) 18-20; in these coordinates
// J. Gatheral, The Volatility Surface (2006), eq. 1.10). Nothing where g is not above its own
// rounding, dw/dt is below 0 or the numbers leave their range.
std::optional<double> local_variance(const SurfacePoint& point, double k);

struct Derived {
  double strike;  // F e^k, quote currency
  double vol;     // decimals a year
  quotes::PutCall put_call;
  double price;                     // present value, quote currency
  pricing::Greeks greeks;           // sticky strike: the vol of a strike stays when F moves
  std::optional<double> density;    // of S_t, per unit of strike in quote currency
  std::optional<double> local_vol;  // decimals a year
};

// Of the option that is out of the money (a call at the forward), unless one is asked for. Nothing
// where the surface has no volatility above 0, or the strike leaves the range of numbers.
std::optional<Derived> derived_at(const TimedSmile& smile, const Carried& carried, double k,
                                  std::optional<quotes::PutCall> put_call = {});

// Fair strike of a swap of realised variance watched continuously, from now to the smile's time:
// -2 E[ln(S_t / F)] / t, which is the strip of options over K^2 (A. Neuberger, J. Portfolio
// Management 20(2) (1994)); exact for paths without jumps.
struct VarianceSwap {
  double variance;  // a year
  double vol;       // its root
};

// As the integral of w over d2 with normal weight (Gatheral 2006, chapter 11), in pieces between
// the smile's breaks. Relative error below 1e-10; nothing where that is not reached, for instance
// where the wings grow so fast that the integral does not end.
std::optional<VarianceSwap> variance_swap(const TimedSmile& smile);

}  // namespace duskgrid::surface
