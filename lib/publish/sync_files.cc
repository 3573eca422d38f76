#include "publish/sync_files.h"

#include <fcntl.h>
#include <unistd.h>

#include <algorithm>
#include <atomic>
#include <cerrno>
#include <thread>

namespace duskgrid::publish {
namespace {

// 0, or the error.
int sync_one(const std::string& path) {
  const int descriptor = ::open(path.c_str(), O_RDONLY | O_CLOEXEC);
  if (descriptor < 0) return errno;
  const int error = ::fsync(descriptor) == 0 ? 0 : errno;
  ::close(descriptor);
  return error;
}

}  // namespace

std::string sync_files(const std::vector<std::string>& paths) {
  constexpr std::size_t kThreads = 16;
  std::vector<int> errors(paths.size(), 0);
  std::atomic<std::size_t> next{0};
  const auto work = [&] {
    for (std::size_t i = next++; i < paths.size(); i = next++) errors[i] = sync_one(paths[i]);
  };
  {
    std::vector<std::jthread> threads;
    for (std::size_t i = 1; i < std::min(kThreads, paths.size()); ++i) threads.emplace_back(work);
    work();
  }
  const auto failed = std::find_if(errors.begin(), errors.end(), [](int e) { return e != 0; });
  if (failed == errors.end()) return {};
  errno = *failed;
  return paths[static_cast<std::size_t>(failed - errors.begin())];
}

}  // namespace duskgrid::publish
