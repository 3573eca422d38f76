// The folder of one run, written beside its place and renamed into it when complete, so
// that a reader sees the last complete run or this one and nothing between.
#pragma once

#include <cstdio>
#include <map>
#include <memory>
#include <string>
#include <string_view>

#include "publish/digest.h"
#include "quotes/result.h"

namespace duskgrid::publish {

// A file being written inside a RunFolder. Errors are kept and told by RunFolder::add().
class RunFile {
 public:
  void write(std::string_view text);

 private:
  friend class RunFolder;
  std::string buffer_;
  Sha256 sum_;
  int descriptor_ = -1;
  std::string error_;
  void flush();
};

// Holds the lock of `out` while it lives; leaves nothing behind unless committed. Failures are
// cannot_create and say which path and why: `out` cannot be made, another run holds it, a
// file cannot be written.
class RunFolder {
 public:
  // Will become out/name. What killed runs left half-written in `out` is cleared away.
  static Result<std::unique_ptr<RunFolder>> create(const std::string& out, const std::string& name);
  ~RunFolder();
  RunFolder(const RunFolder&) = delete;
  RunFolder& operator=(const RunFolder&) = delete;

  // Writes one file through `fill`; `path` is relative and may name a subfolder. Files written are
  // in digests() by path.
  template <class Fill>
  Result<bool> add(const std::string& path, Fill fill) {
    RunFile file;
    if (auto opened = open(file, path); !opened.ok()) return opened;
    fill(file);
    return close(file, path);
  }
  const std::map<std::string, std::string>& digests() const { return digests_; }

  // Syncs and renames into place; an earlier folder of the same name is replaced whole.
  Result<bool> commit();
  const std::string& final_path() const { return final_; }
  // True once commit() has put this run in the place of an earlier one.
  bool replaced() const { return replaced_; }

 private:
  RunFolder(std::string out, std::string name);
  Result<bool> open(RunFile& file, const std::string& path);
  Result<bool> close(RunFile& file, const std::string& path);

  std::string out_, final_, partial_;
  int lock_ = -1;
  bool replaced_ = false;
  std::map<std::string, std::string> digests_;
};

}  // namespace duskgrid::publish
