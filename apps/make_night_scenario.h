// The demo night: a small exchange in a harbour town, all of it invented. Says which
// names there are, what is wrong with their quotes, and how night.toml describes them.
#pragma once

#include <vector>

#include "make_night_files.h"

namespace duskgrid::make_night {

// Every file of the night: the quotes, night.toml, and planted.tsv with one line a
// planted fault. On a night after that of the listing also changes.tsv, with one line a planted
// change since.
std::vector<NightFile> demo_night(const World& world);

}  // namespace duskgrid::make_night
