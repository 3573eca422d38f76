// A night of any size for measuring and for comparing with the truth: an invented universe of
// indices and shares with the shapes of a real one. Not for faults in files: those are planted in
// the demo night, make_night_scenario.h.
#pragma once

#include <cstdint>
#include <filesystem>
#include <string>

#include "make_night_quotes.h"

namespace duskgrid::make_night {

struct UniverseSize {
  std::int64_t underlyings = 6000;  // 1 to 1,000,000
  std::int64_t quotes = 1'500'000;  // contracts, a call and a put a strike; an odd one is left out
};

// Writes quotes.csv, night.toml and truth.csv to `folder`, which exists. Text that says what could
// not be written, or why the size cannot be had; empty when all went well. Same world and size,
// same bytes, for any number of threads.
//
// Smiles are surface SVI, those of event names mixtures of two lognormals from the event on. Vol at
// a strike is that of call and put. American prices are Black's price plus the premium of early
// exercise under a continuous yield, by the tables of pricing/american_panel.h, which leave an
// error below a hundredth of a cent for a spot of 100. Cash dividends count in full in the forward;
// in the premium they act as the continuous yield of the same forward to the expiry.
std::string write_universe(const std::filesystem::path& folder, const World& world,
                           const UniverseSize& size);

}  // namespace duskgrid::make_night
