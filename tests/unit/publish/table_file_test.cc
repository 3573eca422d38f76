#include "publish/table_file.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

#include "publish/text.h"

namespace duskgrid::publish {
namespace {

using Cells = std::vector<std::string>;

class TableFileTest : public testing::Test {
 protected:
  void TearDown() override { std::filesystem::remove(path_); }
  Result<bool> read(const std::string& text, const std::vector<std::string_view>& columns) {
    std::ofstream(path_, std::ios::binary) << text;
    rows_.clear();
    lines_.clear();
    return read_table(path_, columns, [&](std::int64_t line, auto cells) {
      rows_.emplace_back(cells.begin(), cells.end());
      lines_.push_back(line);
    });
  }
  std::string refusal(const std::string& text) {
    const auto result = read(text, {"a", "b"});
    EXPECT_FALSE(result.ok()) << text;
    if (result.ok()) return "";
    EXPECT_EQ(result.failure().fault, Fault::not_quotes);
    return result.failure().detail;
  }

  std::string path_ = testing::TempDir() + "table_file_test.csv";
  std::vector<Cells> rows_;
  std::vector<std::int64_t> lines_;
};

TEST_F(TableFileTest, ColumnsComeInTheOrderAsked) {
  ASSERT_TRUE(read("a,b,c\n1,2,3\n4,,6\n", {"c", "a"}).ok());
  EXPECT_EQ(rows_, (std::vector<Cells>{{"3", "1"}, {"6", "4"}}));
  EXPECT_EQ(lines_, (std::vector<std::int64_t>{2, 3}));
}

TEST_F(TableFileTest, TableWithoutRowsHasNone) {
  ASSERT_TRUE(read("a,b\n", {"a", "b"}).ok());
  EXPECT_TRUE(rows_.empty());
}

TEST_F(TableFileTest, WhatCsvTextWritesComesBack) {
  const Cells texts{"", "plain", "a,b", "\"", "\"\"", "x\"y\"", "two\nlines", "\xC3\xA9", "\xFF"};
  std::string file = "a,b\n";
  for (const auto& text : texts) file += csv_text(text) + "," + csv_text(text) + "\n";
  ASSERT_TRUE(read(file, {"a", "b"}).ok());
  ASSERT_EQ(rows_.size(), texts.size());
  for (std::size_t i = 0; i < texts.size(); ++i) EXPECT_EQ(rows_[i], (Cells{texts[i], texts[i]}));
  EXPECT_EQ(lines_.back(), 12) << "one cell runs over two lines, twice in its row";
}

TEST_F(TableFileTest, LastLineNeedsNoLineFeed) {
  ASSERT_TRUE(read("a,b\n1,", {"a", "b"}).ok());
  EXPECT_EQ(rows_, (std::vector<Cells>{{"1", ""}}));
}

TEST_F(TableFileTest, WhatIsNoTableIsRefusedWithItsLine) {
  EXPECT_EQ(refusal(""), "line 1 has no header");
  EXPECT_EQ(refusal("a,c\n"), "line 1 has no column b");
  EXPECT_EQ(refusal("a,b\n1,2\n1,2,3\n"), "line 3 has 3 cells, the header 2");
  EXPECT_EQ(refusal("a,b\n\n"), "line 2 has 1 cells, the header 2");
  EXPECT_EQ(refusal("a,b\n1,\"2\n"), "line 2 a quotation mark is never closed");
  EXPECT_EQ(refusal("a,b\n1,2\n" + std::string(3 << 20, 'x')), "line 3 is longer than 1 MiB");
}

TEST_F(TableFileTest, MissingFileIsNoInput) {
  const auto result = read_table(path_ + ".none", {"a"}, [](std::int64_t, auto) {});
  ASSERT_FALSE(result.ok());
  EXPECT_EQ(result.failure().fault, Fault::no_input);
}

}  // namespace
}  // namespace duskgrid::publish
