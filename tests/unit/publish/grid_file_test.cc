#include "publish/grid_file.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

#include "publish/tables.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;

const quotes::Instant kAsOf = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
const quotes::Instant kExpiry = std::chrono::sys_days{std::chrono::year{2031} / 6 / 20} + 20h;

class ReadGridTest : public testing::Test {
 protected:
  void TearDown() override { std::filesystem::remove(path_); }

  Result<GridFile> read(const std::string& text) {
    std::ofstream(path_, std::ios::binary) << text;
    return read_grid(path_);
  }
  GridFile taken(const std::string& text) {
    auto file = read(text);
    if (file) return std::move(*file);
    ADD_FAILURE() << file.failure().text();
    return {{}, {{"", {{}}}}};
  }
  std::string refused(const std::string& text) {
    const auto file = read(text);
    if (file) {
      ADD_FAILURE() << "taken, but a failure was due";
      return {};
    }
    EXPECT_EQ(file.failure().fault, Fault::not_quotes);
    EXPECT_EQ(file.failure().where, path_);
    return file.failure().detail;
  }

  std::string path_ = testing::TempDir() + "grid_file_test_" +
                      testing::UnitTest::GetInstance()->current_test_info()->name() + ".csv";
};

bool holds(const std::string& text, const std::string& piece) {
  return text.find(piece) != std::string::npos;
}

TEST_F(ReadGridTest, WrittenGridComesBack) {
  const quotes::Clock clock{"", std::chrono::minutes{-300}};
  InstantTexts instants(clock);
  std::string text(kGridHeader);
  for (const double strike : {110.5, 90.25})
    text +=
        grid_line({kExpiry, "", 0.25, 101, 0.99, 1, strike, 0.2 + strike / 1e4, Support::observed},
                  Axis::strike, "HALYRD", kAsOf, instants);
  const GridFile file = taken(text);
  ASSERT_EQ(file.grids.size(), 1U);
  EXPECT_EQ(file.clock.offset, clock.offset);
  EXPECT_EQ(file.grids[0].underlying, "HALYRD");
  ASSERT_EQ(file.grids[0].slices.size(), 1U);
  const auto& slice = file.grids[0].slices[0];
  EXPECT_EQ(slice.expiry, kExpiry);
  EXPECT_EQ(slice.year_fraction, 0.25);
  EXPECT_EQ(slice.forward, 101);
  EXPECT_EQ(slice.discount_factor, 0.99);
  ASSERT_EQ(slice.nodes.size(), 2U);
  EXPECT_EQ(slice.nodes[0].strike, 90.25);
  EXPECT_EQ(slice.nodes[0].vol, 0.2 + 90.25 / 1e4);
  EXPECT_EQ(slice.nodes[1].strike, 110.5);
}

TEST_F(ReadGridTest, FewestColumnsInAnyOrderAreEnough) {
  const GridFile file = taken("vol,remark,forward,year_fraction,strike\n0.2,x,100,0.5,95\n");
  ASSERT_EQ(file.grids.size(), 1U);
  EXPECT_EQ(file.grids[0].underlying, "");
  EXPECT_EQ(file.grids[0].slices[0].discount_factor, 1);
  EXPECT_EQ(file.grids[0].slices[0].nodes[0].strike, 95);
}

TEST_F(ReadGridTest, DatesStandForTheYearFraction) {
  const GridFile file =
      taken("as_of,expiry,strike,vol,forward\n2031-03-14,2032-03-13,95,0.2,100\n");
  // 365 days, 2032 being a leap year of which the file sees the 29th of February.
  EXPECT_EQ(file.grids[0].slices[0].year_fraction, 1);
}

TEST_F(ReadGridTest, ByteOrderMarkAndCarriageReturnsAreTaken) {
  const GridFile file = taken(
      "\xEF\xBB\xBFstrike,vol,forward,year_fraction\r\n95,0.2,100,0.5\r\n105,0.3,100,0.5\r\n");
  ASSERT_EQ(file.grids[0].slices[0].nodes.size(), 2U);
  EXPECT_EQ(file.grids[0].slices[0].year_fraction, 0.5);
}

TEST_F(ReadGridTest, QuotedCellsAndAMissingLastLineFeedAreTaken) {
  const GridFile file =
      taken("underlying,strike,vol,forward,year_fraction\n\"A,\"\"B\"\"\",95,\"0.2\",100,0.5");
  EXPECT_EQ(file.grids[0].underlying, "A,\"B\"");
}

TEST_F(ReadGridTest, GuardingApostropheIsTakenOff) {
  const GridFile file =
      taken("underlying,strike,vol,forward,year_fraction\n'=A,95,0.2,100,0.5\n'A,95,0.2,100,0.5\n");
  ASSERT_EQ(file.grids.size(), 2U);
  EXPECT_EQ(file.grids[0].underlying, "'A");
  EXPECT_EQ(file.grids[1].underlying, "=A");
}

TEST_F(ReadGridTest, UnderlyingsAreByNameAndTimesInOrder) {
  const GridFile file = taken(
      "underlying,strike,vol,forward,year_fraction\nK,95,0.2,100,2\nH,95,0.2,50,1\nK,95,0.2,100,"
      "1\n");
  ASSERT_EQ(file.grids.size(), 2U);
  EXPECT_EQ(file.grids[0].underlying, "H");
  ASSERT_EQ(file.grids[1].slices.size(), 2U);
  EXPECT_EQ(file.grids[1].slices[0].year_fraction, 1);
  EXPECT_EQ(file.grids[1].slices[1].year_fraction, 2);
}

TEST_F(ReadGridTest, TenorOnAListedExpiryMerges) {
  const GridFile file = taken(
      "expiry,tenor,strike,vol,forward,year_fraction\n2032-03-13,,95,0.2,100,1\n"
      "2032-03-13,,105,0.25,100,1\n2032-03-13,1Y,95,0.2,100,1\n2032-03-13,1Y,100,0.22,100,1\n");
  ASSERT_EQ(file.grids[0].slices.size(), 1U);
  ASSERT_EQ(file.grids[0].slices[0].nodes.size(), 3U);
  EXPECT_EQ(file.grids[0].slices[0].nodes[1].strike, 100);
}

TEST_F(ReadGridTest, ClockIsThatOfTheFirstStatedOffset) {
  const GridFile file = taken(
      "as_of,expiry,strike,vol,forward\n"
      "2031-03-14T16:00:00+01:00,2031-06-20T16:00:00+02:00,95,0.2,100\n");
  EXPECT_EQ(file.clock.offset, std::chrono::minutes{60});
  EXPECT_EQ(file.grids[0].slices[0].expiry,
            std::chrono::sys_days{std::chrono::year{2031} / 6 / 20} + 14h);
}

TEST_F(ReadGridTest, MissingColumnsAreNamed) {
  EXPECT_TRUE(holds(refused("vol,forward,year_fraction\n0.2,100,0.5\n"), "'strike'"));
  EXPECT_TRUE(holds(refused("strike,forward,year_fraction\n95,100,0.5\n"), "'vol'"));
  EXPECT_TRUE(holds(refused("strike,vol,year_fraction\n95,0.2,0.5\n"), "'forward'"));
  EXPECT_TRUE(holds(refused("strike,vol,forward\n95,0.2,100\n"), "year_fraction"));
  EXPECT_TRUE(holds(refused("strike,vol,forward,as_of\n95,0.2,100,2031-03-14\n"), "expiry"));
}

TEST_F(ReadGridTest, ColumnTwiceIsRefused) {
  EXPECT_NE(refused("strike,strike,vol,forward,year_fraction\n95,95,0.2,100,0.5\n"), "");
}

TEST_F(ReadGridTest, CellThatIsNoPositiveNumberIsRefusedWithItsLine) {
  const std::string header = "strike,vol,forward,year_fraction\n95,0.2,100,0.5\n";
  for (const char* row :
       {"x,0.2,100,0.5", "95,,100,0.5", "95,0,100,0.5", "95,-0.2,100,0.5", "95,nan,100,0.5",
        "95,inf,100,0.5", "95,1e999,100,0.5", "95,0.2,100%,0.5", "95,0.2,0,0.5", "95,0.2,100,0",
        "95,0.2,100,-1", "95,0.2 ,100,x", "95,0x1p-2,100,0.5"})
    EXPECT_TRUE(holds(refused(header + row + "\n"), "line 3")) << row;
}

TEST_F(ReadGridTest, BrokenDatesAreRefusedWithTheirLine) {
  const std::string header = "as_of,expiry,strike,vol,forward\n";
  EXPECT_TRUE(holds(refused(header + "2031-02-30,2031-06-20,95,0.2,100\n"), "line 2"));
  EXPECT_TRUE(holds(refused(header + "2031-03-14,later,95,0.2,100\n"), "line 2"));
  EXPECT_TRUE(holds(refused(header + "2031-03-14,2031-03-14,95,0.2,100\n"), "not after"));
}

TEST_F(ReadGridTest, RowOfOtherLengthIsRefused) {
  const std::string header = "strike,vol,forward,year_fraction\n";
  EXPECT_NE(refused(header + "95,0.2,100\n"), "");
  EXPECT_NE(refused(header + "95,0.2,100,0.5,7\n"), "");
}

TEST_F(ReadGridTest, TwoVolatilitiesAtOneNodeAreRefused) {
  const auto why =
      refused("strike,vol,forward,year_fraction\n95,0.2,100,0.5\n96,0.2,100,0.5\n95,0.3,100,0.5\n");
  EXPECT_TRUE(holds(why, "95")) << why;
}

TEST_F(ReadGridTest, TwoForwardsAtOneTimeAreRefusedWithTheLine) {
  const auto why = refused("strike,vol,forward,year_fraction\n95,0.2,100,0.5\n96,0.2,101,0.5\n");
  EXPECT_TRUE(holds(why, "line 3")) << why;
}

TEST_F(ReadGridTest, FileWithoutANodeIsRefused) {
  EXPECT_NE(refused("strike,vol,forward,year_fraction\n"), "");
  EXPECT_NE(refused(""), "");
}

TEST_F(ReadGridTest, MissingFileOrFolderIsNoInput) {
  for (const std::string& path : {path_ + ".none", testing::TempDir()}) {
    const auto file = read_grid(path);
    ASSERT_FALSE(file.ok());
    EXPECT_EQ(file.failure().fault, Fault::no_input);
    EXPECT_EQ(file.failure().where, path);
  }
}

}  // namespace
}  // namespace duskgrid::publish
