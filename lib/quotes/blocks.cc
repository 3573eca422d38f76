#include "quotes/blocks.h"

#include <algorithm>
#include <cstring>

#include "quotes/cells.h"

namespace duskgrid::quotes {
namespace {

// What a block becomes stays in a processor's second cache: larger ones read slower.
constexpr std::size_t kBlock = std::size_t{1} << 18;
constexpr char kQuote = '"';

// Text that was read already and then the rest of its source.
class Replayed final : public TextSource {
 public:
  Replayed(std::string ahead, std::unique_ptr<TextSource> rest)
      : ahead_(std::move(ahead)), rest_(std::move(rest)) {}

  std::size_t read(char* to, std::size_t size) override {
    const std::size_t given = ahead_.copy(to, size, given_);
    given_ += given;
    return given + (given < size ? rest_->read(to + given, size - given) : 0);
  }
  const std::optional<Failure>& failure() const override { return rest_->failure(); }
  const std::string& compression() const override { return rest_->compression(); }
  std::int64_t stored_bytes() const override { return rest_->stored_bytes(); }
  std::string sha256() override { return rest_->sha256(); }

 private:
  std::string ahead_;
  std::size_t given_ = 0;
  std::unique_ptr<TextSource> rest_;
};

// Whether the quotation marks of every line balance.
bool a_row_a_line(std::string_view text) {
  std::size_t quote = text.find(kQuote);
  while (quote != std::string_view::npos) {
    const std::size_t end = std::min(text.find('\n', quote), text.size());
    const std::string_view line = text.substr(quote, end - quote);
    if (std::count(line.begin(), line.end(), kQuote) % 2 != 0) return false;
    quote = text.find(kQuote, end);
  }
  return true;
}

}  // namespace

bool BlockReader::next(TextBlock& block) {
  if (stopped_) return false;
  std::string text = std::move(ahead_);
  const std::size_t kept = text.size();
  text.resize(kept + kBlock);
  const std::size_t got = source_->read(text.data() + kept, kBlock);
  text.resize(kept + got);
  const std::size_t lines = text.rfind('\n') + 1;  // 0 where there is none
  // Only the first line began in an earlier piece and can be as long as that.
  const bool too_long = text.size() > kLongestRow && text.find('\n') > kLongestRow;
  if (got == 0 || source_->failure() || too_long || !a_row_a_line({text.data(), lines})) {
    ahead_ = std::move(text);
    stopped_ = true;
    return false;
  }
  ahead_.assign(text, lines);
  text.resize(lines);
  block.first_line = lines_ + 1;
  lines_ += std::count(text.begin(), text.end(), '\n');
  block.text = std::move(text);
  return true;
}

RowReader BlockReader::rest() && {
  // The line reader takes a byte-order mark off the start of what it is given, which is right only
  // at the start of the text. A blank line before it is no row.
  const bool within = lines_ > 0;
  if (within) ahead_.insert(0, 1, '\n');
  return RowReader(std::make_unique<Replayed>(std::move(ahead_), std::move(source_)),
                   within ? lines_ : 1);
}

BlockRows::BlockRows(TextBlock& block, std::int64_t first_line)
    : at_(block.text.data()),
      end_(at_ + block.text.size()),
      line_(block.first_line),
      first_line_(first_line),
      quoted_(block.text.find(kQuote) != std::string::npos) {}

bool BlockRows::next(Row& row) {
  while (at_ != end_) {
    char* const feed = static_cast<char*>(std::memchr(at_, '\n', end_ - at_));
    char* const stop = feed != at_ && feed[-1] == '\r' ? feed - 1 : feed;
    *stop = '\0';
    row.text = at_;
    row.size = static_cast<std::size_t>(stop - at_);
    row.line = line_++;
    at_ = feed + 1;
    if (row.line < first_line_ || is_blank({row.text, row.size})) continue;
    row.quoted = quoted_ && std::memchr(row.text, kQuote, row.size) != nullptr;
    row.joined = false;
    row.open_quote = false;
    return true;
  }
  return false;
}

}  // namespace duskgrid::quotes
