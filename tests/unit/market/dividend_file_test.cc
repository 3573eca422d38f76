#include "market/dividend_file.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

namespace duskgrid::market {
namespace {

using namespace std::chrono_literals;

class ReadDividends : public testing::Test {
 protected:
  void TearDown() override { std::filesystem::remove(path_); }
  Result<DividendFile> read(const std::string& text) {
    std::ofstream(path_, std::ios::binary) << text;
    return read_dividends(path_, quotes::Clock{"", std::chrono::minutes{-300}});
  }
  void expect_refused(const std::string& text, const std::string& holds) {
    const auto file = read(text);
    ASSERT_FALSE(file.ok()) << text;
    EXPECT_EQ(file.failure().fault, Fault::not_quotes);
    EXPECT_EQ(file.failure().where, path_);
    EXPECT_NE(file.failure().detail.find(holds), std::string::npos) << file.failure().detail;
  }
  std::string path_ = testing::TempDir() + "dividend_file_test_" +
                      testing::UnitTest::GetInstance()->current_test_info()->name() + ".csv";
};

TEST_F(ReadDividends, AmountsByUnderlyingGoneFromTheStartOfTheExDate) {
  const auto file = read(
      "Underlying;Ex Date;Amount;Kind\nHALYRD;2031-05-02;0.42;cash\n"
      "\"SALTPN\";20310602;0.01;Proportional\nHALYRD;2031-08-01;0.44;\n");
  ASSERT_TRUE(file.ok()) << file.failure().text();
  EXPECT_EQ(file->rows, 3);
  ASSERT_EQ(file->table.at("HALYRD").size(), 2u);
  const auto& first = file->table.at("HALYRD")[0];
  EXPECT_EQ(first.ex, std::chrono::sys_days{std::chrono::year{2031} / 5 / 2} + 5h);
  EXPECT_EQ(first.kind, DividendKind::cash);
  EXPECT_EQ(first.amount, 0.42);
  EXPECT_EQ(file->table.at("HALYRD")[1].kind, DividendKind::cash);
  EXPECT_EQ(file->table.at("SALTPN")[0].kind, DividendKind::proportional);
}

TEST_F(ReadDividends, WhatIsNotSuchAFileIsRefusedWithItsLine) {
  expect_refused("underlying,ex_date\nA,2031-05-02\n", "no column amount");
  expect_refused("underlying,ex_date,amount,amount\n", "two columns 'amount'");
  expect_refused("underlying,ex_date,amount\nA,2031-05-02\n", "line 2: has 2 cells");
  expect_refused("underlying,ex_date,amount\nA,02/05/2031,1\n", "ex_date is '02/05/2031'");
  expect_refused("underlying,ex_date,amount\nA,2031-05-02,x\n", "amount is 'x'");
  expect_refused("underlying,ex_date,amount\nA,2031-05-02,nan\n", "must be >= 0");
  expect_refused("underlying,ex_date,amount\nA,2031-05-02,-1\n", "must be >= 0");
  expect_refused("underlying,ex_date,amount\n,2031-05-02,1\n", "no underlying");
  expect_refused("underlying,ex_date,amount,kind\nA,2031-05-02,1,special\n", "kind is 'special'");
  expect_refused("underlying,ex_date,amount,kind\nA,2031-05-02,1,proportional\n", "below 1");
  expect_refused("underlying,ex_date,amount\nA,\"2031-05-02,1\n", "never closed");
  expect_refused("underlying,ex_date,amount\nA,2031-05-02,1\nA,20310502,1.0\n",
                 "line 3: the same dividend stands twice");
  expect_refused("", "holds no text");
}

TEST_F(ReadDividends, MissingFileIsNoInput) {
  const auto file = read_dividends("/no/such/file.csv", {});
  ASSERT_FALSE(file.ok());
  EXPECT_EQ(file.failure().fault, Fault::no_input);
}

}  // namespace
}  // namespace duskgrid::market
