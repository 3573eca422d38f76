// The night before tonight, as far as tonight needs it.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "night/config.h"
#include "publish/past_run.h"

namespace duskgrid::night {

// Reads the surface of every name of a run that has one, on all threads allowed. What cannot be
// read is left out and said in `remarks`.
void read_surfaces(publish::PastRun& run, std::vector<std::string>& remarks);

// The last run in `out` before tonight's date, with its surfaces.
std::optional<publish::PastRun> previous_night(const std::string& out, const ResolvedNight& night,
                                               std::vector<std::string>& remarks);

}  // namespace duskgrid::night
