#include "quotes/rows.h"

#include <limits>  // libfccp/csv.h needs it and does not include it

// Its copies of file names into fixed buffers end with NUL, which the compiler cannot see.
#pragma GCC diagnostic push
#pragma GCC diagnostic ignored "-Wstringop-truncation"
#define CSV_IO_NO_THREAD
#include <libfccp/csv.h>
#pragma GCC diagnostic pop

#include <algorithm>
#include <array>
#include <cstring>

#include "quotes/cells.h"

namespace duskgrid::quotes {
namespace {

constexpr char kQuote = '"';
constexpr std::array<char, 3> kDelimiters{',', ';', '\t'};

class Feed final : public io::ByteSourceBase {
 public:
  explicit Feed(TextSource& source) : source_(source) {}
  int read(char* buffer, int size) override {
    return static_cast<int>(source_.read(buffer, static_cast<std::size_t>(size)));
  }

 private:
  TextSource& source_;
};

template <class Escape>
void split_with(char* text, std::vector<std::string_view>& cells) {
  while (text != nullptr) {
    char* begin;
    char* end;
    io::detail::chop_next_column<Escape>(text, begin, end);
    std::string_view cell = trim({begin, static_cast<std::size_t>(end - begin)});
    if (!cell.empty() && cell.front() == kQuote) {
      begin = begin + (cell.data() - begin);
      end = begin + cell.size();
      Escape::unescape(begin, end);
      cell = trim({begin, static_cast<std::size_t>(end - begin)});
    }
    cells.push_back(cell);
  }
}

template <char delimiter>
void split_at(const Row& row, std::vector<std::string_view>& cells) {
  if (row.quoted) {
    split_with<io::double_quote_escape<delimiter, kQuote>>(row.text, cells);
  } else {
    split_with<io::no_quote_escape<delimiter>>(row.text, cells);
  }
}

bool balanced(std::string_view text) {
  return std::count(text.begin(), text.end(), kQuote) % 2 == 0;
}

std::array<std::ptrdiff_t, kDelimiters.size()> count_delimiters(std::string_view text) {
  std::array<std::ptrdiff_t, kDelimiters.size()> counts{};
  bool inside = false;
  for (const char c : text) {
    if (c == kQuote) inside = !inside;
    if (inside) continue;
    for (std::size_t i = 0; i < kDelimiters.size(); ++i) counts[i] += c == kDelimiters[i];
  }
  return counts;
}

}  // namespace

struct RowReader::Lines {
  io::LineReader reader;
  explicit Lines(TextSource& source) : reader("", std::make_unique<Feed>(source)) {}
};

RowReader::RowReader(std::unique_ptr<TextSource> source, std::int64_t first_line)
    : source_(std::move(source)),
      lines_(std::make_unique<Lines>(*source_)),
      number_(first_line - 1) {}

RowReader::~RowReader() = default;

// A row of one physical line, put back or fresh.
bool RowReader::next_line(Row& row) {
  if (!waiting_.empty()) {
    current_ = std::move(waiting_.front().text);
    row.line = waiting_.front().number;
    waiting_.pop_front();
    row.text = current_.data();
    row.size = current_.size();
    return true;
  }
  if (too_long_) return false;
  try {
    row.text = lines_->reader.next_line();
  } catch (const io::error::line_length_limit_exceeded&) {
    row.text = nullptr;
    too_long_ = true;
    ++number_;
  }
  if (row.text == nullptr) return false;
  row.size = std::strlen(row.text);
  row.line = ++number_;
  too_long_ = row.size > kLongestRow;
  return !too_long_;
}

bool RowReader::next(Row& row) {
  followers_.clear();
  do {
    if (!next_line(row)) return false;
  } while (is_blank({row.text, row.size}));
  row.quoted = std::memchr(row.text, kQuote, row.size) != nullptr;
  row.joined = false;
  row.open_quote = false;
  if (row.quoted && !balanced({row.text, row.size})) join(row);
  return true;
}

void RowReader::join(Row& row) {
  const std::int64_t first = row.line;
  const std::string alone(row.text, row.size);
  std::string whole = alone;
  bool closed = false;
  Row follower;
  while (!closed && whole.size() <= kLongestRow && next_line(follower)) {
    const std::string_view text(follower.text, follower.size);
    closed = !balanced(text);
    whole.append(1, '\n').append(text);
    followers_.push_back({std::string(text), follower.line});
  }
  closed = closed && whole.size() <= kLongestRow;
  current_ = closed ? std::move(whole) : alone;
  row.text = current_.data();
  row.size = current_.size();
  row.line = first;
  row.joined = closed;
  row.open_quote = !closed;
  if (!closed) put_back();
}

void RowReader::put_back() {
  waiting_.insert(waiting_.begin(), std::make_move_iterator(followers_.begin()),
                  std::make_move_iterator(followers_.end()));
  followers_.clear();
}

void RowReader::split_joined() { put_back(); }

std::optional<Failure> RowReader::failure(const std::string& file) const {
  if (source_->failure()) return source_->failure();
  if (!too_long_) return std::nullopt;
  return Failure{Fault::not_quotes, file,
                 "line " + std::to_string(number_) + " is longer than 1 MiB; is this a CSV file?"};
}

void split_row(const Row& row, char delimiter, std::vector<std::string_view>& cells) {
  cells.clear();
  switch (delimiter) {
    case ';': return split_at<';'>(row, cells);
    case '\t': return split_at<'\t'>(row, cells);
    default: return split_at<','>(row, cells);
  }
}

char find_delimiter(std::string_view header, std::string_view first_row) {
  const auto in_header = count_delimiters(header);
  const auto in_first_row = count_delimiters(first_row);
  std::size_t best = 0;
  for (std::size_t i = 1; i < kDelimiters.size(); ++i) {
    if (std::pair(in_header[i], in_first_row[i]) > std::pair(in_header[best], in_first_row[best])) {
      best = i;
    }
  }
  return kDelimiters[best];
}

}  // namespace duskgrid::quotes
