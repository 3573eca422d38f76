// Runs a program as a scheduler would and reads what it left.
#pragma once

#include <fcntl.h>
#include <spawn.h>
#include <stdlib.h>
#include <sys/wait.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <iterator>
#include <map>
#include <string>
#include <vector>

extern char** environ;  // NOLINT: the name POSIX gives it

namespace duskgrid::end_to_end {

namespace fs = std::filesystem;

inline std::string slurp(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

inline void spill(const fs::path& path, const std::string& text) {
  fs::create_directories(path.parent_path());
  std::ofstream(path, std::ios::binary) << text;
}

// A folder of its own, gone with its owner.
class Scratch {
 public:
  Scratch() {
    std::string name = (fs::temp_directory_path() / "duskgrid-test-XXXXXX").string();
    path_ = ::mkdtemp(name.data());
  }
  ~Scratch() {
    std::error_code ignored;
    fs::remove_all(path_, ignored);
  }
  Scratch(const Scratch&) = delete;
  Scratch& operator=(const Scratch&) = delete;
  fs::path operator/(const std::string& name) const { return path_ / name; }

 private:
  fs::path path_;
};

struct Ran {
  int status = -1;  // exit status; 128 + signal when killed
  std::string out, err;
};

inline Ran run(const std::string& program, const std::vector<std::string>& arguments) {
  const Scratch scratch;
  const std::string out = (scratch / "out").string(), err = (scratch / "err").string();
  std::vector<char*> argv{const_cast<char*>(program.c_str())};
  for (const auto& a : arguments) argv.push_back(const_cast<char*>(a.c_str()));
  argv.push_back(nullptr);
  posix_spawn_file_actions_t actions;
  posix_spawn_file_actions_init(&actions);
  posix_spawn_file_actions_addopen(&actions, STDOUT_FILENO, out.c_str(), O_WRONLY | O_CREAT, 0600);
  posix_spawn_file_actions_addopen(&actions, STDERR_FILENO, err.c_str(), O_WRONLY | O_CREAT, 0600);
  pid_t child = 0;
  Ran ran;
  if (posix_spawn(&child, program.c_str(), &actions, nullptr, argv.data(), environ) == 0) {
    int state = 0;
    waitpid(child, &state, 0);
    ran.status = WIFEXITED(state) ? WEXITSTATUS(state) : 128 + WTERMSIG(state);
  }
  posix_spawn_file_actions_destroy(&actions);
  ran.out = slurp(out);
  ran.err = slurp(err);
  return ran;
}

inline Ran duskgrid(const std::vector<std::string>& arguments) {
  return run(DUSKGRID_PROGRAM, arguments);
}

using Row = std::map<std::string, std::string>;

inline std::vector<std::string> split(const std::string& line, char delimiter) {
  std::vector<std::string> cells(1);
  bool quoted = false;
  for (const char c : line) {
    if (c == '"')
      quoted = !quoted;
    else if (c == delimiter && !quoted)
      cells.emplace_back();
    else
      cells.back() += c;
  }
  return cells;
}

// A CSV file as rows by column; enough for files without quotation marks inside cells.
inline std::vector<Row> read_table(const fs::path& path, char delimiter = ',') {
  std::ifstream file(path);
  std::string line;
  std::getline(file, line);
  const auto headers = split(line, delimiter);
  std::vector<Row> rows;
  while (std::getline(file, line)) {
    const auto cells = split(line, delimiter);
    Row row;
    for (std::size_t i = 0; i < headers.size() && i < cells.size(); ++i) row[headers[i]] = cells[i];
    rows.push_back(std::move(row));
  }
  return rows;
}

}  // namespace duskgrid::end_to_end
