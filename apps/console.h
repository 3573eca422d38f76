// What the command says to a person at a terminal, and to a scheduler by its exit status.
#pragma once

#include <chrono>
#include <cstdint>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::console {

// Documented in README.md. 64 and above are those of sysexits.h.
enum ExitStatus : int {
  kDone = 0,
  kFlagged = 3,
  kNotAllPublished = 4,
  kUsage = 64,
  kNotQuotes = 65,
  kNoInput = 66,
  kInternal = 70,
  kCannotCreate = 73,
  kConfiguration = 78,
};
int exit_status(Fault fault);
// Says the failure on standard error and returns its exit status.
int report(const Failure& failure);

// Whether text on standard error may carry colours: a terminal, and NO_COLOR (no-color.org) empty.
bool coloured();
enum class Colour : std::uint8_t { plain, good, look, bad };
// The text in that colour where it may be; untouched elsewhere.
std::string in_colour(const std::string& text, Colour colour);

// A line that rewrites itself, on standard error and only on a terminal: how much of a stage is
// done, how fast, and how long the rest will take.
class ProgressLine {
 public:
  explicit ProgressLine(bool quiet);
  ~ProgressLine();
  void show(std::string_view stage, std::int64_t done, std::int64_t total);
  void clear();

 private:
  bool shown_ = false;
  bool active_;
  int last_permille_ = -1;
  std::string stage_;
  std::chrono::steady_clock::time_point began_;
};

// Columns as wide as their widest cell; numbers to the right.
class Table {
 public:
  // Headers; those that start with '>' are set to the right (the mark is taken off).
  explicit Table(std::vector<std::string> headers);
  void add(std::vector<std::string> cells);
  // Colours one cell of the last row.
  void tint(std::size_t column, Colour colour);
  // A line under the last row, indented, not in columns.
  void remark(std::string text);
  std::string text() const;
  bool empty() const { return rows_.empty(); }

 private:
  struct Row {
    std::vector<std::string> cells;
    std::string remark;
    std::size_t tinted = 0;
    Colour colour = Colour::plain;
  };
  std::vector<std::string> headers_;
  std::vector<bool> to_the_right_;
  std::vector<Row> rows_;
};

// 1234567 as 1,234,567.
std::string grouped(std::int64_t n);
// "4:05" or "1:02:30".
std::string clock_text(double seconds);
// "12,300/s  0:23 left", from what was done in that time; empty before it can be told.
std::string pace(std::int64_t done, std::int64_t total, double seconds);
// Whether the locale of the environment writes UTF-8.
bool writes_utf8();
// Cut to a display width, with a mark where cut.
std::string shortened(std::string_view text, std::size_t width);
// Broken at spaces into lines of at most `width`, each after `indent` spaces.
std::string wrapped(std::string_view text, std::size_t width, std::size_t indent);

}  // namespace duskgrid::console
