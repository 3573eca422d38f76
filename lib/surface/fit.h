// The fit of a whole surface: the backbone, and over it the smoothest overlay that meets the
// quotes inside their spreads without butterfly or calendar arbitrage.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "surface/backbone.h"
#include "surface/overlay.h"

namespace duskgrid::surface {

struct OverlayOptions {
  // Most coefficients of a slice. Range: 0 (no overlay) or 6 to 64. Fewer cannot follow
  // every smile; more cost time and change little, since roughness is penalised.
  int most_coefficients = 20;
  // Most rounds of linearised conditions from the smooth overlays; three times as many from the
  // backbones. Range: >= 1.
  int most_rounds = 12;
  std::optional<std::string> problem() const;
};

struct FitOptions {
  BackboneOptions backbone;
  OverlayOptions overlay;
};

struct FittedSlice {
  SliceParameters backbone;
  Overlay overlay;
  int humps = 1;  // local maxima of the density of ln(S/F); one without an overlay
};

enum class OverlayEnd : std::uint8_t {
  none,       // every quote is well inside its spread without one, or none was asked for
  settled,    // every slice has one, found from the smooth overlays
  sheltered,  // every slice has one, found from the backbones by steps free of arbitrage; quotes
              // may be missed that a longer way round would meet
};

struct SurfaceFit {
  std::vector<FittedSlice> slices;  // as many as given, in order
  FitEnd backbone_end;
  OverlayEnd overlay_end;
};

// Each slice needs one quote or more. Failure: as fit_backbone. Deterministic. Cost linear in
// quotes and in slices.
Result<SurfaceFit> fit_surface(std::span<const FitSlice> slices, const FitOptions& options);

}  // namespace duskgrid::surface
