#include "quotes/paths.h"

#include <glob.h>

#include <algorithm>
#include <filesystem>
#include <optional>
#include <utility>

namespace duskgrid::quotes {
namespace {

bool is_glob(const std::string& path) {
  std::error_code error;
  return path.find_first_of("*?[") != std::string::npos && !std::filesystem::exists(path, error);
}

bool is_folder(const std::string& path) {
  std::error_code error;
  return std::filesystem::is_directory(path, error);
}

std::vector<std::string> matches(const std::string& pattern) {
  ::glob_t found{};
  std::vector<std::string> paths;
  if (::glob(pattern.c_str(), GLOB_NOSORT, nullptr, &found) == 0) {
    paths.assign(found.gl_pathv, found.gl_pathv + found.gl_pathc);
  }
  ::globfree(&found);
  std::erase_if(paths, is_folder);
  std::sort(paths.begin(), paths.end());  // by bytes, whatever the locale
  return paths;
}

}  // namespace

Result<std::vector<std::string>> expand_files(const std::vector<std::string>& files) {
  std::vector<std::string> expanded;
  for (const std::string& path : files) {
    if (!is_glob(path)) {
      expanded.push_back(path);
      continue;
    }
    std::vector<std::string> found = matches(path);
    if (found.empty()) {
      return Failure{Fault::no_input, path,
                     "no file matches; a path is read from the folder the command runs in"};
    }
    std::move(found.begin(), found.end(), std::back_inserter(expanded));
  }
  return expanded;
}

std::string canonical_path(const std::string& path) {
  std::error_code error;
  const std::filesystem::path canonical = std::filesystem::canonical(path, error);
  return error ? path : canonical.string();
}

}  // namespace duskgrid::quotes
