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
  Between to_next = Between::variance;  // of no meaning at the last slice
};

struct Surface {
  std::string underlying;
  std::optional<double> spot;
  std::vector<Slice> slices;  // by year_fraction, increasing; at least one
};

// Total variance of a slice, backbone and overlay, and its derivatives in k.
SmilePoint smile_of(const Slice& slice, double k);

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
// - After the last: total variance grows by the same amount at every k, at the last slice's
//   at-the-money variance a year.
class TimedSmile {
 public:
  TimedSmile(const Surface& surface, double year_fraction);
  // w is not above 0 where an overlay takes it there, which no fit does: no volatility.
  SurfacePoint at(double k) const;
  double year_fraction() const { return t_; }
  // Log-moneyness, increasing, where the third derivative in k may jump: the knots in use.
  std::vector<double> breaks() const;

 private:
  SurfacePoint mixed(const SmilePoint& a, const SmilePoint& b, double k) const;

  double t_;
  const Slice* early_ = nullptr;   // none before the first slice and after the last
  const Slice* late_;              // the last slice after it
  bool past_ = false;              // after the last slice
  double growth_ = 0, shift_ = 0;  // then: of total variance a year, and so far
  Between rule_ = Between::variance;
  double weight_ = 1, weight_slope_ = 0;  // of the late slice; a year
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
