// Files brought to the disk, many at once.
#pragma once

#include <string>
#include <vector>

namespace duskgrid::publish {

// fsync of each file or folder. The calls wait for the disk and not for a processor, and a file
// system joins those that wait at the same time, so that some threads at once take a fraction of
// the time of one after the other. Returns the first path in the list that could not be synced,
// with errno set for it, or empty.
std::string sync_files(const std::vector<std::string>& paths);

}  // namespace duskgrid::publish
