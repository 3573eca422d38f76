// Names that cannot be marked tonight: the surface of an earlier night stands in, for so long. How
// a surface is restated: surface/carry.h.
#pragma once

#include <vector>

#include "night/mark.h"
#include "publish/past_run.h"

namespace duskgrid::night {

// Gives `marked`, which has no surface, the one of `past`: at equal log-moneyness and remaining
// time where that can be restated and is proved free of arbitrage, else at equal expiry where that
// is, with forwards of tonight where there are any. Else it stays refused, with a message that says
// why. docs/methods.md, section 9.3.
void carry(MarkedUnderlying& marked, const publish::PastUnderlying& past, const NightConfig& config,
           const ResolvedNight& night);

// Carries every name of `marked` without a surface that had one the night before, and adds those
// that no file has, in their place by name. Does nothing where carrying is switched off.
void carry_all(std::vector<MarkedUnderlying>& marked, const publish::PastRun& previous,
               const NightConfig& config, const ResolvedNight& night);

}  // namespace duskgrid::night
