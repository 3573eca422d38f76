#include "publish/points_file.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

namespace duskgrid::publish {
namespace {

using quotes::PutCall;

class ReadPointsTest : public testing::Test {
 protected:
  void TearDown() override { std::filesystem::remove(path_); }

  Result<std::vector<WantedPoint>> read(const std::string& text) {
    std::ofstream(path_, std::ios::binary) << text;
    return read_points(path_);
  }
  std::vector<WantedPoint> taken(const std::string& text) {
    auto points = read(text);
    if (points) return std::move(*points);
    ADD_FAILURE() << points.failure().text();
    return std::vector<WantedPoint>(9);
  }
  void expect_refused(const std::string& text, const std::string& holds) {
    const auto points = read(text);
    ASSERT_FALSE(points.ok()) << text;
    EXPECT_EQ(points.failure().fault, Fault::not_quotes);
    EXPECT_EQ(points.failure().where, path_);
    EXPECT_NE(points.failure().detail.find(holds), std::string::npos) << points.failure().detail;
  }

  std::string path_ = testing::TempDir() + "points_file_test_" +
                      testing::UnitTest::GetInstance()->current_test_info()->name() + ".csv";
};

TEST_F(ReadPointsTest, StrikesAndExpiriesComeInTheOrderOfTheFile) {
  const auto points = taken("strike,expiry\n100,2031-06-20\n\n95.5,20310919\n");
  ASSERT_EQ(points.size(), 2u);
  EXPECT_EQ(points[0].line, 2);
  EXPECT_EQ(points[0].expiry, "2031-06-20");
  EXPECT_EQ(points[0].tenor, "");
  EXPECT_EQ(points[0].point.axis, Axis::strike);
  EXPECT_EQ(points[0].point.point, 100);
  EXPECT_EQ(points[0].point.put_call, std::nullopt);
  EXPECT_EQ(points[1].line, 4);
  EXPECT_EQ(points[1].point.point, 95.5);
}

TEST_F(ReadPointsTest, OtherColumnsAndDelimitersServe) {
  const auto points = taken(
      "Book;Put Call;Log Moneyness;Tenor;Underlying\r\nA;P;-0.1;1M;'=K\r\nB;;0.2;2W;HALYRD\r\n");
  ASSERT_EQ(points.size(), 2u);
  EXPECT_EQ(points[0].point.axis, Axis::log_moneyness);
  EXPECT_EQ(points[0].point.point, -0.1);
  EXPECT_EQ(points[0].point.put_call, PutCall::put);
  EXPECT_EQ(points[0].tenor, "1M");
  EXPECT_EQ(points[0].underlying, "=K");
  EXPECT_EQ(points[1].point.put_call, std::nullopt);
}

TEST_F(ReadPointsTest, AStrikeGoesBeforeOtherWordsForIt) {
  const auto points = taken("log_moneyness,strike,moneyness,expiry\n0.1,90,0.9,2031-06-20\n");
  EXPECT_EQ(points.at(0).point.axis, Axis::strike);
  EXPECT_EQ(points.at(0).point.point, 90);
}

TEST_F(ReadPointsTest, WhatIsNoFileOfPointsIsRefusedWithTheLine) {
  expect_refused("", "no text");
  expect_refused("strike,expiry\n", "no point");
  expect_refused("strike,when\n1,2\n", "\"when\"");
  expect_refused("level,expiry\n1,2\n", "strike, moneyness or log_moneyness");
  expect_refused("strike,Strike,expiry\n1,1,2\n", "two columns");
  expect_refused("strike,expiry\n100,2031-06-20\n100\n", "line 3");
  expect_refused("strike,expiry\nfar,2031-06-20\n", "line 2: strike is 'far'");
  expect_refused("strike,expiry\n-1,2031-06-20\n", "> 0");
  expect_refused("strike,expiry\nnan,2031-06-20\n", "> 0");
  expect_refused("moneyness,expiry\n90,2031-06-20\n", "K/F");
  expect_refused("strike,expiry\n100,\n", "neither expiry nor tenor");
  expect_refused("strike,expiry,put_call\n100,2031-06-20,both\n", "put_call");
  expect_refused("strike,expiry\n\"100,2031-06-20\n", "quotation mark");
}

TEST_F(ReadPointsTest, MissingFileIsNoInput) {
  EXPECT_EQ(read_points(path_ + ".not").failure().fault, Fault::no_input);
}

}  // namespace
}  // namespace duskgrid::publish
