// From quotes to a surface and a verdict on it, for tests and benchmarks that do not care how.
#pragma once

#include <algorithm>
#include <chrono>
#include <cstdint>
#include <span>
#include <utility>

#include "surface/fit.h"
#include "surface/surface.h"
#if __has_include("arbitrage/certificate.h")
#include "arbitrage/certificate.h"
#else
#include "arbitrage/surface_checks.h"
#endif

namespace duskgrid::fitted {

// Whether fits have an overlay; without one a fit is free of arbitrage but meets only the quotes
// that its backbone can.
#if __has_include("surface/fit.cc")
inline constexpr bool kWithOverlay = true;
inline Result<surface::SurfaceFit> fit(std::span<const surface::FitSlice> slices) {
  return surface::fit_surface(slices, {});
}
#else
inline constexpr bool kWithOverlay = false;
inline Result<surface::SurfaceFit> fit(std::span<const surface::FitSlice> slices) {
  const auto backbone = surface::fit_backbone(slices, {});
  if (!backbone) return backbone.failure();
  surface::SurfaceFit out{};
  out.end = backbone->end;
  out.settled = true;
  for (const auto& s : backbone->slices) out.slices.push_back({s, {}});
  return out;
}
#endif

#if __has_include("arbitrage/certificate.h")
inline bool certified(const surface::Surface& surface) {
  return arbitrage::certify(surface).certified;
}
#else
inline bool certified(const surface::Surface& surface) {
  return arbitrage::check_surface(surface).violations.empty();
}
#endif

// Gives the stretches between expiries their rule.
#if __has_include("arbitrage/certificate.h")
inline surface::Surface with_rules(surface::Surface surface) {
  return arbitrage::with_proved_rules(std::move(surface));
}
#else
inline surface::Surface with_rules(surface::Surface surface) {
  for (std::size_t i = 0; i < surface.slices.size(); ++i) {
    const bool overlaid = !surface.slices[i].overlay.empty();
    if (overlaid) surface.slices[i].to_next = surface::Between::price;
    if (overlaid && i > 0) surface.slices[i - 1].to_next = surface::Between::price;
  }
  return surface;
}
#endif

// Where a fit says from when on its overlay has faded.
template <class Fit, class Surface>
void carry_horizon(const Fit& fit, Surface& surface) {
  if constexpr (requires { surface.horizon = fit.horizon; }) surface.horizon = fit.horizon;
}

// Forwards of 100 and no interest.
inline surface::Surface surface_of(std::span<const surface::FitSlice> slices,
                                   const surface::SurfaceFit& fit) {
  surface::Surface out{"INVENTED", 100.0, {}};
  carry_horizon(fit, out);
  for (std::size_t i = 0; i < slices.size(); ++i) {
    const auto& quotes = slices[i].quotes;
    const auto [low, high] = std::minmax_element(
        quotes.begin(), quotes.end(), [](const auto& a, const auto& b) { return a.k < b.k; });
    const std::chrono::seconds ahead(
        static_cast<std::int64_t>(31'536'000 * slices[i].year_fraction));
    const auto& fitted = fit.slices[i];
    out.slices.push_back({quotes::Instant(ahead), slices[i].year_fraction, 100, 1, fitted.backbone,
                          low->k, high->k, fitted.overlay});
  }
  return with_rules(std::move(out));
}

}  // namespace duskgrid::fitted
