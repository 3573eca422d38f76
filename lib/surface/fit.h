// The fit of a whole surface: the backbone, and over it the smoothest overlay that meets the
// quotes inside their spreads without butterfly or calendar arbitrage.
#pragma once

#include <optional>
#include <span>
#include <string>
#include <vector>

#include "surface/backbone.h"
#include "surface/overlay.h"

namespace duskgrid::surface {

struct OverlayOptions {
  // Most coefficients of a slice. Range: 0 (no overlay) to 64.
  int most_coefficients = 20;
  // Most rounds of linearised constraints. Range: >= 1.
  int most_rounds = 12;
  std::optional<std::string> problem() const;
};

struct FitOptions {
  BackboneOptions backbone;
  OverlayOptions overlay;
};

struct FittedSlice {
  SliceParameters backbone;
  Overlay overlay;  // empty where the backbone alone serves
};

struct SurfaceFit {
  std::vector<FittedSlice> slices;  // as many as given, in order
  FitEnd end;                       // of the backbone
  bool settled;                     // false: the overlay did not settle and was given up
};

// Each slice needs one quote or more. Failure: as fit_backbone. Deterministic. Cost linear in
// quotes and in slices.
Result<SurfaceFit> fit_surface(std::span<const FitSlice> slices, const FitOptions& options);

}  // namespace duskgrid::surface
