#include "quotes/blocks.h"

#include <gtest/gtest.h>
#include <tbb/global_control.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <random>
#include <string>
#include <utility>
#include <vector>

#include "quotes/digest.h"
#include "quotes/load.h"

namespace duskgrid::quotes {
namespace {

using Found = std::vector<std::pair<std::int64_t, std::string>>;

std::string written(const std::string& text) {
  const std::string path = testing::TempDir() + std::to_string(::getpid()) + "blocks_test.csv";
  std::ofstream(path, std::ios::binary) << text;
  return path;
}

void add_rest(RowReader rows, Found& found) {
  for (Row row; rows.next(row);)
    found.emplace_back(row.line, std::string(row.open_quote ? "!" : "") + row.text);
  if (const auto failure = rows.failure("")) found.emplace_back(-1, failure->detail);
}

Found by_rows(const std::string& path) {
  Found found;
  add_rest(RowReader(std::move(TextSource::open(path).value())), found);
  return found;
}

// Rows by blocks, then what is left to a RowReader; `in_blocks` counts the former.
Found by_blocks(const std::string& path, std::size_t& in_blocks) {
  BlockReader blocks(std::move(TextSource::open(path).value()));
  Found found;
  for (TextBlock block; blocks.next(block);) {
    BlockRows rows(block, 1);
    for (Row row; rows.next(row);) found.emplace_back(row.line, row.text);
  }
  in_blocks = found.size();
  add_rest(std::move(blocks).rest(), found);
  return found;
}

void expect_same(const std::string& text, bool all_in_blocks) {
  const std::string path = written(text);
  std::size_t in_blocks = 0;
  const Found found = by_blocks(path, in_blocks), expected = by_rows(path);
  ASSERT_EQ(found.size(), expected.size());
  for (std::size_t i = 0; i < found.size(); ++i) ASSERT_EQ(found[i], expected[i]) << i;
  EXPECT_EQ(in_blocks == found.size(), all_in_blocks);
}

// Lines of every kind that does not need the line before it.
std::string plain_lines(int count, std::uint64_t seed) {
  std::mt19937_64 random(seed);
  const std::vector<std::string> kinds{
      "a,b,c\n", "\n", "\r\n", " \t\n", "\"x,y\",\"\"\"\",z\r\n", "one\n", "\"q\"\n", "1.5,2.25,3"};
  std::string text;
  for (int i = 0; i < count; ++i) {
    text += kinds[random() % kinds.size()];
    if (text.back() != '\n') text += ',' + std::string(random() % 90, 'd') + '\n';
  }
  return text;
}

constexpr int kLines = 60'000;  // some 1.3 MB, several blocks

TEST(BlockReader, RowsAreThoseOfTheRowReader) { expect_same(plain_lines(kLines, 1), true); }

TEST(BlockReader, TextWithoutALastLineFeedAndEmptyTextAreReadWhole) {
  expect_same(plain_lines(10, 2) + "last", true);
  expect_same("", true);
}

TEST(BlockReader, RowOverSeveralLinesIsLeftToTheRowReaderWithAllAfterIt) {
  expect_same(plain_lines(kLines, 3) + "a,\"b\nc\",d\n" + plain_lines(kLines, 4), false);
}

TEST(BlockReader, QuoteLeftOpenIsLeftToTheRowReader) {
  expect_same(plain_lines(kLines, 5) + "a,\"b\n" + plain_lines(100, 6), false);
}

TEST(BlockReader, ByteOrderMarkWhereTheRestBeginsStays) {
  expect_same("\xEF\xBB\xBF\"a\nb\"\n", false);
  // 262,144 bytes fill a block exactly, so that the rest starts at the mark.
  expect_same(std::string(262'143, 'x') + "\n\xEF\xBB\xBF\"a\nb\"\n", false);
}

TEST(BlockReader, LongestRowIsReadAndALongerOneRefused) {
  expect_same("a\n" + std::string(kLongestRow, 'x') + "\nb\n", true);
  expect_same("a\n" + std::string(kLongestRow + 1, 'x') + "\nb\n", false);
  expect_same("a\n" + std::string(3 * kLongestRow, 'x'), false);
}

TEST(BlockReader, SumIsThatOfTheStoredFile) {
  const std::string path = written(plain_lines(kLines, 7));
  BlockReader blocks(std::move(TextSource::open(path).value()));
  for (TextBlock block; blocks.next(block);) {
  }
  EXPECT_EQ(blocks.source().sha256(), digest_file(path)->sha256);
}

// Quotes with rows too short, names that come back, and what a quotation mark hides.
std::string quote_file() {
  std::mt19937_64 random(8);
  std::string text = "underlying,expiry,strike,put_call,bid,ask\n";
  for (int i = 0; i < kLines; ++i) {
    text += "N" + std::to_string(random() % 700) + ",2031-0" + std::to_string(1 + random() % 9) +
            "-15," + std::to_string(1 + random() % 300) + (random() % 2 ? ",C,1,2" : ",P,1.5,x");
    for (std::uint64_t extra = random() % 50; extra > 40; --extra) text += ",9";
    text += '\n';
    if (i == kLines - 1000) text += "\"N1\n2\",2031-05-15,7,C,1,2\n";
  }
  return text;
}

TEST(LoadQuotes, TableIsTheSameForAnyNumberOfThreads) {
  SourceOptions source;
  source.files = {written(quote_file())};
  std::vector<LoadedQuotes> loads;
  for (const std::size_t threads : {1, 2, 8}) {
    const tbb::global_control limit(tbb::global_control::max_allowed_parallelism, threads);
    auto loaded = load_quotes({source}, {});
    ASSERT_TRUE(loaded.ok());
    loads.push_back(std::move(loaded.value()));
  }
  const QuoteTable& first = loads.front().table;
  ASSERT_EQ(first.quotes.size(), static_cast<std::size_t>(kLines + 1));
  EXPECT_EQ(loads.front().files.front().rows, kLines + 1);
  EXPECT_EQ(loads.front().files.front().sha256, digest_file(source.files.front())->sha256);
  for (const LoadedQuotes& other : loads) {
    EXPECT_EQ(other.table.underlyings, first.underlyings);
    EXPECT_EQ(other.table.notes, first.notes);
    EXPECT_EQ(other.files.front().unreadable, loads.front().files.front().unreadable);
    ASSERT_EQ(other.table.quotes.size(), first.quotes.size());
    for (std::size_t i = 0; i < first.quotes.size(); ++i) {
      const Quote &a = first.quotes[i], &b = other.table.quotes[i];
      ASSERT_TRUE(a.line == b.line && a.underlying == b.underlying && a.note == b.note &&
                  a.reason == b.reason && a.expiry == b.expiry)
          << "line " << a.line;
    }
  }
}

}  // namespace
}  // namespace duskgrid::quotes
