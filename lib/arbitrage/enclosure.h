// Enclosures of a smile and its derivatives over a range of log-moneyness, for certificate.h.
#pragma once

#include <vector>

#include "arbitrage/affine.h"
#include "surface/backbone.h"
#include "surface/overlay.h"

namespace duskgrid::arbitrage {

// J. Gatheral's raw SVI: w = a + b (rho (k - m) + sqrt((k - m)^2 + sigma^2)).
struct RawSlice {
  double a, b, rho, m, sigma;
};

// w and its first two derivatives in k; in the tails, with y = 1 / k, they are y w, dw/dk and
// d2w/dk2 (see tail()).
struct Form {
  Affine w, slope, bend;
};

// w = level + tilt k + sqrt((stretch k + offset)^2 + breadth), whose parts are exact up to the
// rounding kept with them: the backbone and raw SVI.
struct Hyperbola {
  Affine level, tilt;
  double stretch;  // >= 0; 0 for a straight line
  Affine offset, breadth;

  static Hyperbola of(const surface::SliceParameters& slice);
  static Hyperbola of(const RawSlice& slice);

  Form at(const Affine& k) const;
  // The same smile with a constant added.
  Hyperbola raised(const Affine& by) const { return {level + by, tilt, stretch, offset, breadth}; }
  // At k = 1 / y, y >= 0, also at y = 0, where all are limits.
  Form tail(const Affine& y) const;
  // w less (tilt + stretch) k, the wing's slope, at k = 1 / y, y >= 0; at y = 0 the limit.
  Affine past_slope(const Affine& y) const;
  // The same smile with k for -k.
  Hyperbola mirrored() const { return {level, -tilt, stretch, -offset, breadth}; }
  // Where the bend gives way to the wings: the k > 0 past which tails are looked at in y.
  double reach() const;
};

// w of `late` less that of `early`, with the digits it has where they all but agree.
Affine step_at(const Hyperbola& early, const Hyperbola& late, const Affine& k);

// One piece of an overlay: u = sum of a[i] (k - start)^i.
struct Cubic {
  double start, end;
  Affine a0, a1, a2, a3;
};

// The pieces between neighbouring knots, in order.
std::vector<Cubic> pieces_of(const surface::Overlay& overlay);

// u and its first two derivatives over one piece.
Form overlay_over(const Cubic& piece, const Affine& k);

}  // namespace duskgrid::arbitrage
