// Butterfly, calendar and wing arbitrage of a fitted surface on dense points: evidence,
// not a proof.
#pragma once

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

// The trades behind what a certificate found broken, in its order: where it was found, with legs as
// near to one another as prices of doubles can tell apart. Undecided findings have none.
std::vector<Violation> violations_of(const surface::Surface& surface,
                                     const Certificate& certificate);

}  // namespace duskgrid::arbitrage
