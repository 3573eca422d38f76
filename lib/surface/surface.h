// A surface: the slices of one underlying and the rules between, before and beyond them.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/quote.h"
#include "surface/backbone.h"
#include "surface/overlay.h"

namespace duskgrid::surface {

// How a smile between two expiries follows from theirs, at equal log-moneyness k.
enum class Between : std::uint8_t {
  variance,  // total variance linear in time; free of arbitrage where that is proved
  price,     // a convex combination of the undiscounted call prices over the forward, which is
             // free of arbitrage whenever the two expiries are: Gatheral & Jacquier 2014, lemma 5.1
};
std::string_view word(Between rule);

struct Slice {
  quotes::Instant expiry;
  double year_fraction;  // ACT/365F from the as-of, > 0
  double forward;        // quote currency
  double discount_factor;
  SliceParameters backbone;
  double k_low, k_high;  // range of the used quotes, log-moneyness
  Overlay overlay = {};
  Between to_next = Between::variance;  // of the last slice: up to the horizon
};

struct Surface {
  std::string underlying;
  std::optional<double> spot;
  std::vector<Slice> slices;  // by year_fraction, increasing; at least one
  // From this time on the last slice's overlay has faded; years, not below the last slice's.
  // 0 means at the last slice.
  double horizon = 0;
};

// Total variance of a slice and its derivatives in k: the square of sqrt(w of the backbone +
// shift) + overlay.
SmilePoint smile_of(const Slice& slice, double k, double shift = 0);

struct SurfacePoint {
  double w;  // total variance
  double dw_dk;
  double d2w_dk2;
  double dw_dt;  // at fixed k, a year; at an expiry that of the times before it
};

// The smile at one time t > 0. Refers to the surface, which must outlive it.
// - Between two slices: as the earlier slice's `to_next` says. Under the price rule the weights are
//   such that total variance at the money is linear in time.
// - Before the first: volatility at each k is that of the first slice.
// - After the last: between the last slice and, at the horizon h, its backbone with theta (h/t - 1)
//   added to total variance, as between two slices; then that amount goes on growing
//   (Gatheral & Jacquier 2014, theorem 4.3).
class TimedSmile {
 public:
  TimedSmile(const Surface& surface, double year_fraction);
  SurfacePoint at(double k) const;
  double year_fraction() const { return t_; }
  // Log-moneyness, increasing, where the third derivative in k may jump: the knots in use.
  std::vector<double> breaks() const;

 private:
  struct End {
    const Slice* slice = nullptr;
    double t = 0, shift = 0;
    bool faded = false;
    SmilePoint at(double k) const;
  };
  SurfacePoint mixed(const SmilePoint& a, const SmilePoint& b, double k) const;

  double t_;
  End early_, late_;  // early_.slice is null before the first; equal ends at a slice
  Between rule_ = Between::variance;
  double weight_ = 1, weight_slope_ = 0;  // of the late end; a year
};

SurfacePoint point_at(const Surface& surface, double k, double year_fraction);
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
