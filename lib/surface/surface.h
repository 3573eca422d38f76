// A surface: the slices of one underlying and the rules between, before and beyond them.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "quotes/quote.h"
#include "surface/backbone.h"

namespace duskgrid::surface {

struct Slice {
  quotes::Instant expiry;
  double year_fraction;  // ACT/365F from the as-of, > 0
  double forward;        // quote currency
  double discount_factor;
  SliceParameters backbone;
  double k_low, k_high;  // range of the used quotes, log-moneyness
};

struct Surface {
  std::string underlying;
  std::optional<double> spot;
  std::vector<Slice> slices;  // by year_fraction, increasing; at least one
};

// The smile at any time t > 0:
// - between two slices theta, psi and rho psi are linear in t, which keeps the calendar and
//   butterfly conditions of the slices (J. Corbetta, P. Cohort, I. Laachir, C. Martini,
//   Decisions in Economics and Finance 42 (2019); proof for the conditions used here in
//   docs/methods.md);
// - before the first, volatility at each k is that of the first slice;
// - after the last, total variance grows by the same amount at every k, at the last slice's
//   at-the-money variance a year (Gatheral & Jacquier 2014, theorem 4.3).
// `shift` is the amount added to total variance (0 but after the last slice).
struct TimedSmile {
  SliceParameters parameters;
  double shift;
};
TimedSmile smile_at_time(const Surface& surface, double year_fraction);

// Total variance and its k-derivatives at (k, t), t > 0.
SmilePoint point_at(const TimedSmile& smile, double k);
SmilePoint point_at(const Surface& surface, double k, double year_fraction);
// Implied volatility, decimals a year.
double vol_at(const Surface& surface, double k, double year_fraction);

// Forward and discount factor at any t > 0: logarithms linear in t between neighbours, from
// ln(spot) and 0 at t = 0. Without a spot the first slice's forward holds before it (or the first
// two slices' growth, when there are two); beyond the last slice the last rates of growth go on.
struct Carried {
  double forward;
  double discount_factor;
};
Carried carried_at(const Surface& surface, double year_fraction);

}  // namespace duskgrid::surface
