#include "quotes/rows.h"

#include <gtest/gtest.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <string>
#include <utility>
#include <vector>

namespace duskgrid::quotes {
namespace {

class RowReaderTest : public testing::Test {
 protected:
  RowReader reader(const std::string& text) {
    path_ = testing::TempDir() + std::to_string(::getpid()) + "rows_test.csv";
    std::ofstream(path_, std::ios::binary) << text;
    return RowReader(std::move(TextSource::open(path_).value()));
  }

  std::vector<std::pair<std::int64_t, std::string>> rows(const std::string& text) {
    RowReader rows = reader(text);
    std::vector<std::pair<std::int64_t, std::string>> found;
    Row row;
    while (rows.next(row)) {
      found.emplace_back(row.line, std::string(row.open_quote ? "!" : "") + row.text);
    }
    return found;
  }

  std::string path_;
};

using Found = std::vector<std::pair<std::int64_t, std::string>>;

TEST_F(RowReaderTest, LineEndsOfEitherKindAreTakenOff) {
  EXPECT_EQ(rows("a\nb\r\nc"), (Found{{1, "a"}, {2, "b"}, {3, "c"}}));
}

TEST_F(RowReaderTest, BlankLinesAreSkippedButCounted) {
  EXPECT_EQ(rows("\na\n \t\n\r\nb\n\n"), (Found{{2, "a"}, {5, "b"}}));
}

TEST_F(RowReaderTest, QuotedLineFeedKeepsTheFirstLineNumber) {
  EXPECT_EQ(rows("a,\"b\nc\",d\ne\n"), (Found{{1, "a,\"b\nc\",d"}, {3, "e"}}));
}

TEST_F(RowReaderTest, QuoteOpenToTheEndCostsOneLineOnly) {
  EXPECT_EQ(rows("a\nb,\"c\nd\ne\n"), (Found{{1, "a"}, {2, "!b,\"c"}, {3, "d"}, {4, "e"}}));
}

TEST_F(RowReaderTest, QuoteOpenPastTheLongestRowCostsOneLineOnly) {
  std::string text = "b,\"c\n";
  const std::string filler(1000, 'x');
  const int lines = 1200;  // 1.2 MB, past the 1 MiB of a row
  for (int i = 0; i < lines; ++i) text += filler + "\n";
  text += "last,\"d\"\n";
  const Found found = rows(text);
  ASSERT_EQ(found.size(), lines + 2);
  EXPECT_EQ(found.front().second, "!b,\"c");
  EXPECT_EQ(found.back(), (std::pair<std::int64_t, std::string>{lines + 2, "last,\"d\""}));
}

TEST_F(RowReaderTest, JoinedRowTakenApartGivesItsOtherLines) {
  RowReader rows = reader("5\",a\nb\nc,6\"\nd\n");
  Row row;
  ASSERT_TRUE(rows.next(row));
  ASSERT_TRUE(row.joined);
  rows.split_joined();
  ASSERT_TRUE(rows.next(row));
  EXPECT_STREQ(row.text, "b");
  EXPECT_EQ(row.line, 2);
  ASSERT_TRUE(rows.next(row));
  EXPECT_TRUE(row.open_quote);
  ASSERT_TRUE(rows.next(row));
  EXPECT_STREQ(row.text, "d");
  EXPECT_EQ(row.line, 4);
}

TEST_F(RowReaderTest, LineLongerThanARowMayBeIsAFailure) {
  for (const std::size_t size : {kLongestRow + 1, std::size_t{40} << 20}) {
    RowReader rows = reader("a,b\n" + std::string(size, 'x') + "\nc,d\n");
    Row row;
    EXPECT_TRUE(rows.next(row));
    EXPECT_FALSE(rows.next(row));
    const auto failure = rows.failure(path_);
    ASSERT_TRUE(failure);
    EXPECT_EQ(failure->fault, Fault::not_quotes);
    EXPECT_NE(failure->detail.find("line 2 "), std::string::npos);
  }
}

std::vector<std::string> split(std::string text, char delimiter) {
  Row row;
  row.text = text.data();
  row.size = text.size();
  row.quoted = text.find('"') != std::string::npos;
  std::vector<std::string_view> cells;
  split_row(row, delimiter, cells);
  return {cells.begin(), cells.end()};
}

using Cells = std::vector<std::string>;

TEST(SplitRow, CellsAreTrimmedAndTheLastMayBeEmpty) {
  EXPECT_EQ(split("a, b ,\tc,", ','), (Cells{"a", "b", "c", ""}));
  EXPECT_EQ(split("a\t\tb", '\t'), (Cells{"a", "", "b"}));
  EXPECT_EQ(split("1,5;2", ';'), (Cells{"1,5", "2"}));
}

TEST(SplitRow, QuotesAreTakenOffAndDoubledOnesMadeSingle) {
  EXPECT_EQ(split("\"a,b\",\" c \",\"d\"\"e\",\"\",f", ','), (Cells{"a,b", "c", "d\"e", "", "f"}));
  EXPECT_EQ(split(" \"1,234\" ;2", ';'), (Cells{"1,234", "2"}));
}

TEST(FindDelimiter, MostFrequentOutsideQuotesWins) {
  EXPECT_EQ(find_delimiter("a,b,c", ""), ',');
  EXPECT_EQ(find_delimiter("a;\"b,c,d,e\";f", ""), ';');
  EXPECT_EQ(find_delimiter("a\tb\tc", ""), '\t');
}

TEST(FindDelimiter, FirstRowDecidesWhenTheHeaderDoesNot) {
  EXPECT_EQ(find_delimiter("bid, price;ask", "1;2"), ';');
  EXPECT_EQ(find_delimiter("a,b;c", ""), ',');
}

}  // namespace
}  // namespace duskgrid::quotes
