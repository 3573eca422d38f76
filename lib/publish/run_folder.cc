#include "publish/run_folder.h"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <filesystem>
#include <string_view>
#include <system_error>
#include <utility>
#include <vector>

#include "publish/sync_files.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

constexpr std::size_t kBlock = 1 << 18;
// A folder, or a link, being written, and a folder that made way for one.
constexpr std::string_view kPartial = ".partial-";
constexpr std::string_view kAside = ".old";
constexpr const char* kLatest = "latest";

std::string last_error() { return std::strerror(errno); }

bool exists(const std::string& path) {
  struct stat found {};
  return ::lstat(path.c_str(), &found) == 0;
}

bool sync_path(const std::string& path) {
  const int descriptor = ::open(path.c_str(), O_RDONLY | O_CLOEXEC);
  if (descriptor < 0) return false;
  // Some file systems cannot sync a folder, and say so by EINVAL: they have no need to.
  const bool ok = ::fsync(descriptor) == 0 || errno == EINVAL;
  const int error = errno;
  ::close(descriptor);
  errno = error;
  return ok;
}

std::vector<std::string> names_in(const fs::path& folder, std::error_code& error) {
  std::vector<std::string> names;
  for (fs::directory_iterator at(folder, error), end; !error && at != end; at.increment(error))
    names.push_back(at->path().filename());
  return names;
}

std::string aside_of(const std::string& name) {
  return std::string(kPartial) + name + std::string(kAside);
}

// What stands after a run to `final` came to nothing.
std::string standing(const std::string& final) {
  return exists(final) ? "; nothing of this run is published, the earlier run " + final +
                             " is untouched by it"
                       : "; nothing is published";
}

// A folder that stepped aside for one that never came goes back to its place, out of the way of
// the clearing; false where it cannot.
bool put_back(const fs::path& out, const std::string& name) {
  if (!name.ends_with(kAside)) return true;
  const std::string home =
      out / name.substr(kPartial.size(), name.size() - kPartial.size() - kAside.size());
  return exists(home) || ::rename((out / name).c_str(), home.c_str()) == 0;
}

// Puts `partial` where `final` is. Where the kernel can swap the two names there is no
// instant without a folder of that name; elsewhere the old one steps aside first, and comes back
// when the next run finds that nothing took its place.
bool swap_in(const std::string& partial, const std::string& final) {
  if (!exists(final)) return ::rename(partial.c_str(), final.c_str()) == 0;
  if (::renameat2(AT_FDCWD, partial.c_str(), AT_FDCWD, final.c_str(), RENAME_EXCHANGE) == 0)
    return true;
  const fs::path place(final);
  const std::string aside = place.parent_path() / aside_of(place.filename());
  if (::rename(final.c_str(), aside.c_str()) != 0) return false;
  if (::rename(partial.c_str(), final.c_str()) != 0) {
    const int error = errno;
    ::rename(aside.c_str(), final.c_str());
    errno = error;
    return false;
  }
  std::error_code ignored;
  // The new name must be on the disk before the old files leave it.
  if (sync_path(fs::path(final).parent_path())) fs::remove_all(aside, ignored);
  return true;
}

}  // namespace

bool RunFile::write(std::string_view text) {
  buffer_ += text;
  if (buffer_.size() >= kBlock) flush();
  return error_.empty() && !stop_.stop_requested();
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

RunFolder::RunFolder(std::string out, std::string name, OutputLock lock, std::stop_token stop)
    : out_(std::move(out)),
      name_(std::move(name)),
      final_(out_ + "/" + name_),
      partial_(out_ + "/" + std::string(kPartial) + name_),
      lock_(std::move(lock)),
      stop_(std::move(stop)) {}

// The lock is freed after this, when the members go.
RunFolder::~RunFolder() {
  std::error_code ignored;
  fs::remove_all(partial_, ignored);
}

Failure RunFolder::unpublished(Fault fault, const std::string& path,
                               const std::string& what) const {
  return {fault, path, what + standing(final_)};
}

Result<std::unique_ptr<RunFolder>> RunFolder::create(const std::string& out,
                                                     const std::string& name,
                                                     const LockWait& wait) {
  auto lock = OutputLock::take(out, wait);
  if (!lock) {
    const auto& failure = lock.failure();
    return Failure{failure.fault, failure.where, failure.detail + standing(out + "/" + name)};
  }
  std::unique_ptr<RunFolder> folder(new RunFolder(out, name, std::move(*lock), wait.stop));
  std::error_code error;
  if (exists(folder->final_) && !fs::is_directory(folder->final_, error))
    return Failure{Fault::cannot_create, folder->final_, "is in the way and not a folder"};
  if (auto cleared = folder->clear_leftovers(); !cleared) return cleared.failure();
  return folder;
}

// What killed runs left in `out`, the lock being ours.
Result<bool> RunFolder::clear_leftovers() const {
  const fs::path out(out_);
  std::error_code error;
  for (const auto& name : names_in(out, error)) {
    if (!name.starts_with(kPartial)) continue;
    const std::string path = out / name;
    if (!put_back(out, name))
      return unpublished(Fault::cannot_create, path,
                         "a complete run that cannot be put back: " + last_error());
    fs::remove_all(path, error);
    if (error)
      return unpublished(Fault::cannot_create, path,
                         "a killed run left it and it cannot be removed: " + error.message());
  }
  if (error) return unpublished(Fault::cannot_create, out_, error.message());
  return true;
}

Result<bool> RunFolder::open(RunFile& file, const std::string& path) {
  if (stop_.stop_requested()) return unpublished(Fault::stopped, "", "stopped while writing");
  const fs::path full = fs::path(partial_) / path;
  std::error_code error;
  fs::create_directories(full.parent_path(), error);
  if (error) return unpublished(Fault::cannot_create, final_ + "/" + path, error.message());
  file.stop_ = stop_;
  file.descriptor_ = ::open(full.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0644);
  if (file.descriptor_ < 0)
    return unpublished(Fault::cannot_create, final_ + "/" + path, last_error());
  return true;
}

Result<bool> RunFolder::close(RunFile& file, const std::string& path) {
  file.flush();
  const bool stopped = stop_.stop_requested();
  if (::close(file.descriptor_) != 0 && file.error_.empty()) file.error_ = last_error();
  if (stopped) return unpublished(Fault::stopped, "", "stopped while writing");
  if (!file.error_.empty())
    return unpublished(Fault::cannot_create, final_ + "/" + path, file.error_);
  const std::lock_guard lock(adding_);
  digests_[path] = file.sum_.hex();
  return true;
}

Result<bool> RunFolder::ready() const {
  std::error_code error;
  std::vector<std::string> paths{partial_};
  for (fs::recursive_directory_iterator at(partial_, error), end; !error && at != end;
       at.increment(error))
    paths.push_back(at->path());
  if (error) return unpublished(Fault::cannot_create, final_, error.message());
  const auto failed = sync_files(paths);
  if (stop_.stop_requested()) return unpublished(Fault::stopped, "", "stopped while writing");
  if (!failed.empty()) return unpublished(Fault::cannot_create, failed, last_error());
  return true;
}

Result<bool> RunFolder::commit(bool has_marks) {
  if (auto complete = ready(); !complete) return complete;
  const std::string earlier = final_;
  if (!has_marks && exists(final_)) final_ += "-refused";
  replaced_ = exists(final_);
  if (!swap_in(partial_, final_)) {
    const std::string error = last_error();
    final_ = earlier;
    return unpublished(Fault::cannot_create, final_, "cannot be put in place: " + error);
  }
  if (!sync_path(out_))
    remarks_.push_back(
        out_ +
        ": the disk does not confirm that the run will outlast a power cut: " + last_error());
  if (has_marks) point_latest();
  return true;
}

// The run is in its place: whatever goes wrong here is a remark.
void RunFolder::point_latest() {
  const fs::path link = fs::path(out_) / kLatest;
  const fs::path fresh = fs::path(out_) / (std::string(kPartial) + kLatest);
  std::error_code error;
  if (exists(link) && !fs::is_symlink(link, error)) {
    remarks_.push_back(link.string() + " is not a link, and is left as it is");
    return;
  }
  const std::string target = fs::read_symlink(link, error);
  // A link that leads nowhere gives way to any run.
  if (!error && fs::exists(link, error) && target > name_) return;
  fs::create_symlink(name_, fresh, error);
  if (!error) fs::rename(fresh, link, error);
  if (error)
    remarks_.push_back(link.string() + " still leads to an earlier run: " + error.message());
  else if (!sync_path(out_))
    remarks_.push_back(link.string() + " may not outlast a power cut: " + last_error());
}

}  // namespace duskgrid::publish
