// The right to publish into an output folder: one process at a time. The kernel holds the lock
// (flock on <out>/.lock) and frees it with its process, however that ends, so a lock is never left
// behind. Hosts that share a folder exclude one another where its file system passes locks on.
#pragma once

#include <stop_token>
#include <string>

#include "quotes/result.h"

namespace duskgrid::publish {

struct LockWait {
  double seconds = 0;         // how long a held lock is waited for, >= 0
  std::stop_token stop = {};  // ends the wait
};

class OutputLock {
 public:
  // Makes `out` and its parents where they are missing. Failures: cannot_create when `out` cannot
  // be made, written to or locked, or is held past the wait (the message names the holder's
  // process, host and since when); stopped.
  static Result<OutputLock> take(const std::string& out, const LockWait& wait);
  ~OutputLock();
  OutputLock(OutputLock&& other) noexcept;
  OutputLock& operator=(OutputLock&&) = delete;

 private:
  explicit OutputLock(int descriptor) : descriptor_(descriptor) {}
  int descriptor_;
};

}  // namespace duskgrid::publish
