// The files that a list of paths and globs stands for.
#pragma once

#include <string>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::quotes {

// Paths as named; globs (* ? []) replaced by the files that match, sorted by the
// bytes of their names, folders left out. A path that exists as written is no glob.
// no_input when a glob matches nothing. Paths that do not exist are kept.
Result<std::vector<std::string>> expand_files(const std::vector<std::string>& files);

// One spelling for all paths to a file; the path itself when it has none.
std::string canonical_path(const std::string& path);

}  // namespace duskgrid::quotes
