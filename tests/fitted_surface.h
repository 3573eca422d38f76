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

inline Result<surface::SurfaceFit> fit(std::span<const surface::FitSlice> slices) {
  return surface::fit_surface(slices, {});
}

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

// Forwards of 100 and no interest.
inline surface::Surface surface_of(std::span<const surface::FitSlice> slices,
                                   const surface::SurfaceFit& fit) {
  surface::Surface out{"INVENTED", 100.0, {}};
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
