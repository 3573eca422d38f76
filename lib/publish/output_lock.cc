#include "publish/output_lock.h"

#include <fcntl.h>
#include <fmt/format.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <cerrno>
#include <chrono>
#include <cstring>
#include <filesystem>
#include <string_view>
#include <system_error>
#include <thread>
#include <utility>

#include "quotes/instants.h"

namespace duskgrid::publish {
namespace {

using SteadyClock = std::chrono::steady_clock;

Failure cannot(const std::string& out, const std::string& what) {
  return {Fault::cannot_create, out, what};
}

std::string last_error() { return std::strerror(errno); }

// What a holder leaves in the file for those who find it locked.
std::string own_record() {
  std::array<char, 256> host{};
  if (::gethostname(host.data(), host.size() - 1) != 0) host = {"unknown"};
  const auto now = std::chrono::floor<std::chrono::seconds>(std::chrono::system_clock::now());
  return fmt::format("process {} on {} since {}\n", ::getpid(), host.data(),
                     quotes::format_instant({}, now));
}

void write_record(int descriptor, std::string_view text) {
  // For people alone: on a full disk the lock holds without it.
  if (::ftruncate(descriptor, 0) == 0) [[maybe_unused]]
    const auto written = ::pwrite(descriptor, text.data(), text.size(), 0);
}

// Anybody may have written there: one line of printable text.
std::string holder(int descriptor) {
  std::array<char, 300> text{};
  const ssize_t size = ::pread(descriptor, text.data(), text.size(), 0);
  std::string record(text.data(), static_cast<std::size_t>(std::max<ssize_t>(size, 0)));
  record.erase(std::min(record.find('\n'), record.size()));
  for (char& c : record)
    if (static_cast<unsigned char>(c) < ' ' || c == '\x7f') c = '?';
  return record.empty() ? "a process that has not said its name" : record;
}

// A lock that another user made may still be held, if not signed.
int open_lock(const std::string& path) {
  const int descriptor = ::open(path.c_str(), O_RDWR | O_CREAT | O_CLOEXEC, 0666);
  return descriptor < 0 && errno == EACCES ? ::open(path.c_str(), O_RDONLY | O_CLOEXEC)
                                           : descriptor;
}

// Someone may have removed the file between its opening and its locking; a lock on a file without
// a name keeps nobody out.
bool still_named(int descriptor, const std::string& path) {
  struct stat ours {
  }, named{};
  return ::fstat(descriptor, &ours) == 0 && ::stat(path.c_str(), &named) == 0 &&
         ours.st_ino == named.st_ino && ours.st_dev == named.st_dev;
}

enum class Attempt { taken, held, again, failed };

Attempt attempt(int descriptor, const std::string& path) {
  if (::flock(descriptor, LOCK_EX | LOCK_NB) == 0)
    return still_named(descriptor, path) ? Attempt::taken : Attempt::again;
  if (errno == EINTR) return Attempt::again;
  return errno == EWOULDBLOCK ? Attempt::held : Attempt::failed;
}

Result<bool> make_folder(const std::string& out) {
  std::error_code error;
  std::filesystem::create_directories(out, error);
  if (error) return cannot(out, "the output folder cannot be made: " + error.message());
  // Known before a night is marked for nothing; the effective user decides.
  if (::faccessat(AT_FDCWD, out.c_str(), W_OK | X_OK, AT_EACCESS) != 0)
    return cannot(out, "cannot be written to: " + last_error());
  return true;
}

}  // namespace

OutputLock::OutputLock(OutputLock&& other) noexcept
    : descriptor_(std::exchange(other.descriptor_, -1)) {}

OutputLock::~OutputLock() {
  if (descriptor_ < 0) return;
  write_record(descriptor_, "");
  ::close(descriptor_);
}

Result<OutputLock> OutputLock::take(const std::string& out, const LockWait& wait) {
  constexpr auto kBetween = std::chrono::milliseconds{50};
  if (auto made = make_folder(out); !made) return made.failure();
  const std::string path = out + "/.lock";
  const std::chrono::duration<double> patience(std::max(wait.seconds, 0.0));
  const auto start = SteadyClock::now();
  while (true) {
    OutputLock lock(open_lock(path));
    if (lock.descriptor_ < 0) return cannot(out, "cannot be written to: " + last_error());
    const auto got = attempt(lock.descriptor_, path);
    if (got == Attempt::taken) {
      write_record(lock.descriptor_, own_record());
      return lock;
    }
    // Not ours: nothing of it is to be wiped.
    const int descriptor = std::exchange(lock.descriptor_, -1);
    const std::string error = last_error(), by = holder(descriptor);
    ::close(descriptor);
    if (got == Attempt::failed) return cannot(path, "cannot be locked: " + error);
    if (wait.stop.stop_requested())
      return Failure{Fault::stopped, out, "stopped while waiting for " + by};
    if (got == Attempt::held && SteadyClock::now() - start >= patience)
      return cannot(out, "another run is writing here: " + by +
                             "; wait for it (--wait SECONDS) or choose another --out");
    if (got == Attempt::held) std::this_thread::sleep_for(kBetween);
  }
}

}  // namespace duskgrid::publish
