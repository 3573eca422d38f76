// The configuration that tells a reader how the demo night's files are written.
#pragma once

#include <string>

#include "make_night_quotes.h"

namespace duskgrid::make_night {

// The names whose facts the configuration has to state, because no quote shows them.
struct StatedNames {
  ChainPlan ladder;   // the one name and expiry of the ladder, which the file leaves out
  ChainPlan vols;     // quoted in volatility, so that no parity shows its forward
  ChainPlan futures;  // priced by the future of each expiry
  ChainPlan thin;     // too few quotes for parity
};
std::string night_toml(const World& world, const StatedNames& names);

}  // namespace duskgrid::make_night
