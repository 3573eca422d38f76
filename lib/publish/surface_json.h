// A surface as JSON and back, every parameter at full precision.
#pragma once

#include <string>
#include <string_view>

#include "quotes/instants.h"
#include "surface/surface.h"

namespace duskgrid::publish {

struct StoredSurface {
  quotes::AsOf as_of;
  surface::Surface surface;
};

// Reloads to the same surface bit for bit, on the same clock.
std::string surface_to_json(const StoredSurface& stored);
// Failure (not_quotes, at `where`): not JSON, not of this form, or parameters that no
// surface has (times not increasing or more than 1e-9 years from ACT/365F of the dates, theta not
// > 0, |rho| >= 1, psi < 0, knots not increasing, ...).
Result<StoredSurface> surface_from_json(std::string_view text, const std::string& where);

}  // namespace duskgrid::publish
