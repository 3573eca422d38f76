// The folder of one run, written beside its place and renamed into it when complete, so
// that a reader sees the last complete run or this one and nothing between.
#pragma once

#include <cstdio>
#include <map>
#include <memory>
#include <mutex>
#include <stop_token>
#include <string>
#include <string_view>
#include <vector>

#include "publish/digest.h"
#include "publish/output_lock.h"
#include "quotes/result.h"

namespace duskgrid::publish {

// A file being written inside a RunFolder. Errors are kept and told by RunFolder::add().
class RunFile {
 public:
  // False when there is no sense in writing more: an error, or a stop was asked for.
  bool write(std::string_view text);

 private:
  friend class RunFolder;
  std::string buffer_;
  Sha256 sum_;
  int descriptor_ = -1;
  std::string error_;
  std::stop_token stop_;
  void flush();
};

// Holds the lock of `out` while it lives; leaves nothing behind unless committed. Failures are
// cannot_create and say which path and why (`out` cannot be made, another run holds it, a
// file cannot be written), and stopped; both say what stands in `out` now.
class RunFolder {
 public:
  // Will become out/name; of two names the later one is the greater as text, as with ISO dates.
  // What killed runs left half-written in `out` is cleared away. Nothing is written before add().
  static Result<std::unique_ptr<RunFolder>> create(const std::string& out, const std::string& name,
                                                   const LockWait& wait = {});
  ~RunFolder();
  RunFolder(const RunFolder&) = delete;
  RunFolder& operator=(const RunFolder&) = delete;

  // Writes one file through `fill`; `path` is relative and may name a subfolder. Files written are
  // in digests() by path. May be called from several threads at once, for different paths.
  template <class Fill>
  Result<bool> add(const std::string& path, Fill fill) {
    RunFile file;
    if (auto opened = open(file, path); !opened.ok()) return opened;
    fill(file);
    return close(file, path);
  }
  const std::map<std::string, std::string>& digests() const { return digests_; }

  // Syncs and renames into place; an earlier folder of the same name is replaced whole. The link
  // out/latest then leads to the run, unless it leads to one of a greater name. A run without
  // marks must not take the place of one that has some: where there is an earlier folder it goes
  // beside it as out/name-refused, and it is never the latest.
  Result<bool> commit(bool has_marks = true);
  const std::string& final_path() const { return final_; }
  // True once commit() has put this run in the place of an earlier one.
  bool replaced() const { return replaced_; }
  // What went wrong in commit() once the run was in its place.
  const std::vector<std::string>& remarks() const { return remarks_; }

 private:
  RunFolder(std::string out, std::string name, OutputLock lock, std::stop_token stop);
  Result<bool> open(RunFile& file, const std::string& path);
  Result<bool> close(RunFile& file, const std::string& path);
  Result<bool> clear_leftovers() const;
  Result<bool> ready() const;
  Failure unpublished(Fault fault, const std::string& path, const std::string& what) const;
  void point_latest();

  std::string out_, name_, final_, partial_;
  OutputLock lock_;
  std::stop_token stop_;
  bool replaced_ = false;
  std::mutex adding_;
  std::map<std::string, std::string> digests_;
  std::vector<std::string> remarks_;
};

}  // namespace duskgrid::publish
