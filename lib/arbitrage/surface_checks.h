// Butterfly, calendar and wing arbitrage of a fitted surface on dense points: evidence,
// not a proof.
#pragma once

#include <optional>
#include <vector>

#include "arbitrage/certificate.h"
#include "arbitrage/violation.h"
#include "surface/surface.h"

namespace duskgrid::arbitrage {

struct SurfaceCheckOptions {
  // Points a slice, evenly spaced over the span. Range: >= 3.
  int points = 2001;
  // Span beyond the quoted range and the money, in at-the-money deviations. Range: > 0.
  double deviations = 10;
};

struct SurfaceCheck {
  std::vector<Violation> violations;  // the worst point of each broken stretch
  double least_durrleman;             // over all points of all slices and half way between them
  double least_calendar_step;         // of w between neighbouring times, total variance
};

// Looks at every slice and half way between slices (where the time rule is at work).
// g and the steps of w may fall short of zero by rounding only.
SurfaceCheck check_surface(const surface::Surface& surface,
                           const SurfaceCheckOptions& options = {});

// The trade behind what a certificate found broken: of those at the place found and at some
// hundreds of others, over the quoted ranges of the smiles and 20 at-the-money deviations beyond,
// the one that locks in most, with legs so far apart that prices of doubles can tell. Nothing where
// nothing was broken or there is no volatility to trade (`positive`), and where what is locked in
// is lost in the rounding of the prices. Of a break between slices, at the time that is worst at
// the place found.
std::optional<Violation> violation_of(const surface::Surface& surface, const Finding& finding);
// Those of all findings, in their order.
std::vector<Violation> violations_of(const surface::Surface& surface,
                                     const Certificate& certificate);

}  // namespace duskgrid::arbitrage
