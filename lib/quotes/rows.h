// The rows of a CSV text, and the cells of a row; fast-cpp-csv-parser finds the line
// ends and the delimiters. Not for what cells mean.
#pragma once

#include <cstdint>
#include <deque>
#include <memory>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/bytes.h"

namespace duskgrid::quotes {

// Longest row, line feeds inside quoted cells included.
inline constexpr std::size_t kLongestRow = std::size_t{1} << 20;

struct Row {
  char* text = nullptr;  // ends with NUL; split_row writes to it
  std::size_t size = 0;
  std::int64_t line = 0;    // physical line it starts on, from 1
  bool quoted = false;      // has a quotation mark
  bool joined = false;      // runs over several physical lines
  bool open_quote = false;  // a quotation mark is left open: cannot be split
};

// Gives the rows of a text one by one, blank lines left out. A row whose quotation
// marks do not balance goes on over the following physical lines; if that leads
// nowhere within kLongestRow, the first line alone is the row, with open_quote set.
class RowReader {
 public:
  // `first_line` is the number of the first line of the source.
  explicit RowReader(std::unique_ptr<TextSource> source, std::int64_t first_line = 1);
  ~RowReader();

  // False at the end of the text and after a failure. The row stays valid to the next call.
  bool next(Row& row);

  // Takes a joined row apart again: its first line counts as read, the following ones
  // are read as rows of their own. For a row that makes no sense as a whole, where a
  // stray quotation mark would otherwise hide every row to the next one.
  void split_joined();

  // A line longer than kLongestRow or a failure of the source, to be asked after the last row.
  std::optional<Failure> failure(const std::string& file) const;
  TextSource& source() { return *source_; }

 private:
  struct Lines;
  struct Line {
    std::string text;
    std::int64_t number;
  };
  bool next_line(Row& row);
  void join(Row& row);
  void put_back();

  std::unique_ptr<TextSource> source_;
  std::unique_ptr<Lines> lines_;
  std::int64_t number_;  // of the physical line last taken from lines_
  bool too_long_ = false;
  std::deque<Line> waiting_;     // lines looked at and put back
  std::vector<Line> followers_;  // lines joined to the current row
  std::string current_;          // the current row when it is in no buffer of lines_
};

// Splits a row at `delimiter` (one of , ; tab) outside quotation marks; quotes around
// a cell are taken off, doubled ones made single, blanks at the ends trimmed. The
// cells point into the row's text. The row must not have open_quote.
void split_row(const Row& row, char delimiter, std::vector<std::string_view>& cells);

// The delimiter that a header row uses: the one among , ; tab found most often outside
// quotes; if two are even there, in the first data row (may be empty); then in that order.
char find_delimiter(std::string_view header, std::string_view first_row);

}  // namespace duskgrid::quotes
