#include "publish/run_folder.h"

#include <fcntl.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <filesystem>
#include <string_view>
#include <system_error>
#include <vector>

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

constexpr std::size_t kBlock = 1 << 18;
// A folder being written, and one that made way for it.
constexpr std::string_view kPartial = ".partial-";
constexpr std::string_view kAside = ".old";

Failure cannot(const std::string& path, const std::string& what) {
  return {Fault::cannot_create, path, what};
}

std::string last_error() { return std::strerror(errno); }

bool sync_path(const std::string& path) {
  const int descriptor = ::open(path.c_str(), O_RDONLY | O_CLOEXEC);
  if (descriptor < 0) return false;
  const bool ok = ::fsync(descriptor) == 0;
  ::close(descriptor);
  return ok;
}

// Puts `partial` where `final` is. Where the kernel can swap the two names there is no
// instant without a folder of that name; elsewhere the old one steps aside first.
bool swap_in(const std::string& partial, const std::string& final) {
  struct stat found {};
  if (::lstat(final.c_str(), &found) != 0) return ::rename(partial.c_str(), final.c_str()) == 0;
  if (::renameat2(AT_FDCWD, partial.c_str(), AT_FDCWD, final.c_str(), RENAME_EXCHANGE) == 0)
    return true;
  const std::string aside = partial + std::string(kAside);
  if (::rename(final.c_str(), aside.c_str()) != 0) return false;
  if (::rename(partial.c_str(), final.c_str()) == 0) {
    std::error_code ignored;
    fs::remove_all(aside, ignored);
    return true;
  }
  ::rename(aside.c_str(), final.c_str());
  return false;
}

// What killed runs left in `out`, the lock being ours. A folder that stepped aside for one that
// never came goes back to its place.
bool clear_leftovers(const fs::path& out, std::error_code& error) {
  std::vector<std::string> names;
  for (fs::directory_iterator at(out, error), end; !error && at != end; at.increment(error))
    names.push_back(at->path().filename());
  for (const auto& name : names) {
    if (error || !name.starts_with(kPartial)) continue;
    if (name.ends_with(kAside)) {
      const fs::path home =
          out / name.substr(kPartial.size(), name.size() - kPartial.size() - kAside.size());
      std::error_code ignored;
      if (!fs::exists(fs::symlink_status(home, ignored))) fs::rename(out / name, home, error);
    }
    if (!error) fs::remove_all(out / name, error);
  }
  return !error;
}

}  // namespace

void RunFile::write(std::string_view text) {
  buffer_ += text;
  if (buffer_.size() >= kBlock) flush();
}

void RunFile::flush() {
  sum_.add(buffer_);
  std::size_t done = 0;
  while (done < buffer_.size() && error_.empty()) {
    const ssize_t n = ::write(descriptor_, buffer_.data() + done, buffer_.size() - done);
    if (n > 0)
      done += static_cast<std::size_t>(n);
    else if (errno != EINTR)
      error_ = last_error();
  }
  buffer_.clear();
}

RunFolder::RunFolder(std::string out, std::string name)
    : out_(std::move(out)),
      final_(out_ + "/" + name),
      partial_(out_ + "/" + std::string(kPartial) + name) {}

RunFolder::~RunFolder() {
  std::error_code ignored;
  if (lock_ >= 0) fs::remove_all(partial_, ignored);
  if (lock_ >= 0) ::close(lock_);
}

Result<std::unique_ptr<RunFolder>> RunFolder::create(const std::string& out,
                                                     const std::string& name) {
  std::unique_ptr<RunFolder> folder(new RunFolder(out, name));
  std::error_code error;
  fs::create_directories(out, error);
  if (error) return cannot(out, "the output folder cannot be made: " + error.message());
  if (fs::exists(folder->final_, error) && !fs::is_directory(folder->final_, error))
    return cannot(folder->final_, "is in the way and not a folder");
  const std::string lock = out + "/.lock";
  folder->lock_ = ::open(lock.c_str(), O_RDWR | O_CREAT | O_CLOEXEC, 0644);
  if (folder->lock_ < 0) return cannot(out, "cannot be written to: " + last_error());
  if (::flock(folder->lock_, LOCK_EX | LOCK_NB) != 0) {
    ::close(folder->lock_);
    folder->lock_ = -1;
    return cannot(out, "another run is writing here; wait for it or choose another --out");
  }
  if (clear_leftovers(out, error)) fs::create_directories(folder->partial_, error);
  if (error) return cannot(folder->partial_, error.message());
  return folder;
}

Result<bool> RunFolder::open(RunFile& file, const std::string& path) {
  const fs::path full = fs::path(partial_) / path;
  std::error_code error;
  fs::create_directories(full.parent_path(), error);
  if (error) return cannot(full.parent_path(), error.message());
  file.descriptor_ = ::open(full.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0644);
  if (file.descriptor_ < 0) return cannot(full, last_error());
  return true;
}

Result<bool> RunFolder::close(RunFile& file, const std::string& path) {
  file.flush();
  if (file.error_.empty() && ::fsync(file.descriptor_) != 0) file.error_ = last_error();
  ::close(file.descriptor_);
  if (!file.error_.empty()) return cannot(final_ + "/" + path, file.error_);
  digests_[path] = file.sum_.hex();
  return true;
}

Result<bool> RunFolder::commit() {
  std::error_code error;
  for (const auto& entry : fs::recursive_directory_iterator(partial_, error))
    if (entry.is_directory() && !sync_path(entry.path())) return cannot(entry.path(), last_error());
  if (error) return cannot(partial_, error.message());
  if (!sync_path(partial_)) return cannot(partial_, last_error());
  replaced_ = fs::exists(final_, error);
  if (!swap_in(partial_, final_)) return cannot(final_, "cannot be replaced: " + last_error());
  sync_path(out_);
  return true;
}

}  // namespace duskgrid::publish
