#include "publish/table_file.h"

#include <fmt/format.h>

#include <algorithm>
#include <cstdio>
#include <memory>
#include <string>

namespace duskgrid::publish {
namespace {

constexpr std::size_t kLongestRow = std::size_t{1} << 20;

struct Unusable {
  std::string why;
};

// Cells from characters: whole rows go on to `take`.
class TableParser {
 public:
  TableParser(const std::vector<std::string_view>& columns, const TakeRow& take)
      : columns_(columns), take_(take), picked_(columns.size()) {}

  void add(std::string_view text) {
    for (const char c : text) put(c);
  }
  void end() {
    if (quoted_) throw Unusable{"a quotation mark is never closed"};
    if (!text_.empty() || !ends_.empty()) {  // no line feed at the end
      ends_.push_back(text_.size());
      end_row();
    }
    if (!header_seen_) throw Unusable{"has no header"};
  }
  std::int64_t line() const { return row_line_; }

 private:
  void put(char c) {
    if (c == '"') return put_mark();
    if (quoted_ || (c != ',' && c != '\n')) return put_plain(c);
    mark_may_double_ = false;
    ends_.push_back(text_.size());
    if (c == '\n') end_row();
  }

  void put_plain(char c) {
    if (c == '\n') ++line_;
    mark_may_double_ = false;
    text_ += c;
    if (text_.size() > kLongestRow) throw Unusable{"is longer than 1 MiB"};
  }

  // The second of two marks inside a quoted cell is one of the text.
  void put_mark() {
    if (mark_may_double_) text_ += '"';
    mark_may_double_ = quoted_;
    quoted_ = !quoted_;
  }

  void end_row() {
    cells_.clear();
    std::size_t begin = 0;
    for (const std::size_t end : ends_) {
      cells_.push_back(std::string_view(text_).substr(begin, end - begin));
      begin = end;
    }
    header_seen_ ? take_row() : take_header();
    text_.clear();
    ends_.clear();
    row_line_ = ++line_;
  }

  void take_header() {
    header_seen_ = true;
    width_ = cells_.size();
    for (const auto column : columns_) {
      const auto at = std::find(cells_.begin(), cells_.end(), column);
      if (at == cells_.end()) throw Unusable{fmt::format("has no column {}", column)};
      places_.push_back(static_cast<std::size_t>(at - cells_.begin()));
    }
  }

  void take_row() {
    if (cells_.size() != width_)
      throw Unusable{fmt::format("has {} cells, the header {}", cells_.size(), width_)};
    for (std::size_t i = 0; i < places_.size(); ++i) picked_[i] = cells_[places_[i]];
    take_(row_line_, picked_);
  }

  const std::vector<std::string_view>& columns_;
  const TakeRow& take_;
  std::string text_;               // of the row's cells, one after the other
  std::vector<std::size_t> ends_;  // of the cells in text_
  bool quoted_ = false, mark_may_double_ = false, header_seen_ = false;
  std::int64_t line_ = 1, row_line_ = 1;
  std::size_t width_ = 0;
  std::vector<std::size_t> places_;
  std::vector<std::string_view> cells_, picked_;
};

}  // namespace

Result<bool> read_table(const std::string& path, const std::vector<std::string_view>& columns,
                        const TakeRow& take) {
  const std::unique_ptr<std::FILE, int (*)(std::FILE*)> file(std::fopen(path.c_str(), "rb"),
                                                             &std::fclose);
  if (!file) return Failure{Fault::no_input, path, "cannot be opened for reading"};
  TableParser parser(columns, take);
  std::string block(std::size_t{1} << 18, '\0');
  try {
    while (const std::size_t n = std::fread(block.data(), 1, block.size(), file.get()))
      parser.add({block.data(), n});
    if (std::ferror(file.get())) return Failure{Fault::no_input, path, "cannot be read to its end"};
    parser.end();
  } catch (const Unusable& unusable) {
    return Failure{Fault::not_quotes, path, fmt::format("line {} {}", parser.line(), unusable.why)};
  }
  return true;
}

}  // namespace duskgrid::publish
