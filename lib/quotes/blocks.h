// A text in blocks of whole lines, so that several threads can split and read the rows of one file.
// What is harder than a row a line is left to rows.h.
#pragma once

#include <cstdint>
#include <memory>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/bytes.h"
#include "quotes/rows.h"

namespace duskgrid::quotes {

struct TextBlock {
  std::string text;         // whole lines
  std::int64_t first_line;  // number of its first line
};

// Cuts a text into blocks in which each line that is not blank is a row.
class BlockReader {
 public:
  explicit BlockReader(std::unique_ptr<TextSource> source) : source_(std::move(source)) {}

  // False at the end of the text, after a failure of the source, and before a block whose rows run
  // over several lines, or a line that is too long: rest() then reads on from there.
  bool next(TextBlock& block);

  // The rows from where next() stopped to the end of the text. The reader is spent then.
  RowReader rest() &&;

  TextSource& source() { return *source_; }

 private:
  std::unique_ptr<TextSource> source_;
  std::string ahead_;       // read and not given yet
  std::int64_t lines_ = 0;  // lines given
  bool stopped_ = false;
};

// The rows of a block from `first_line` on, one by one. Writes to the block's text.
class BlockRows {
 public:
  BlockRows(TextBlock& block, std::int64_t first_line);
  // False after the last. The row stays valid as long as the block.
  bool next(Row& row);

 private:
  char* at_;
  char* end_;
  std::int64_t line_;  // of the line at `at_`
  std::int64_t first_line_;
  bool quoted_;  // the block has a quotation mark somewhere
};

}  // namespace duskgrid::quotes
