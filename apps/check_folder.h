// A run folder held against its own account, told to a person.
#pragma once

#include <string>

#include "quotes/result.h"

namespace duskgrid::commands {

// Prints what was looked at, notes and findings on standard output. True for a sound folder.
Result<bool> check_folder(const std::string& folder);

}  // namespace duskgrid::commands
