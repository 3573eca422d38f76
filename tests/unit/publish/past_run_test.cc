#include "publish/past_run.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

#include "publish/text.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;
using namespace std::chrono_literals;

const quotes::Clock kClock{"", std::chrono::minutes{-300}};
const quotes::Instant kFriday = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;

constexpr const char* kConfiguration =
    R"({"zone": "", "grid": {"axis": "log_moneyness", "points": [-0.1, 0.1], "tenors": ["3M"]},
        "compare": {"tolerance": 0.02, "times_typical": 5.0, "deviations": 4, "least_nights": 4, "most_nights": 9}})";

class PastRunTest : public testing::Test {
 protected:
  void TearDown() override { fs::remove_all(out_); }

  void spill(const std::string& path, const std::string& text) {
    fs::create_directories(fs::path(path).parent_path());
    std::ofstream(path, std::ios::binary) << text;
  }
  // A run of one underlying, in a folder of `out_`.
  std::string made(const std::string& date, quotes::Instant as_of,
                   const std::string& configuration = kConfiguration) {
    const std::string folder = out_ + "/" + date;
    RunRecord record;
    record.as_of = {as_of, kClock};
    record.configuration = configuration;
    record.underlyings.push_back(
        {"=A,B", Status::carried, true, 1, 0, 0, 0, "2031-03-13T16:00:00-05:00", "carried"});
    record.underlyings.push_back({"NONE", Status::refused, false, 0, 0, 0, 0, "", "no quote"});
    spill(folder + "/run.json", run_to_json(record));
    spill(folder + "/expiries.csv",
          std::string(kExpiriesHeader) +
              "\"'=A,B\",2031-06-20T16:00:00-05:00,10,8,7,0.001,00112233aabbccdd\n");
    const surface::Surface surface{
        "=A,B", 100.0, {{as_of + 24h * 365, 1, 100, 0.99, {0.04, 0, 0}, 0, 0}}};
    spill(folder + "/surfaces/" + encode_file_name("=A,B") + ".json",
          surface_to_json({record.as_of, surface}));
    return folder;
  }

  const std::string out_ = testing::TempDir() + "past_run_test_" +
                           testing::UnitTest::GetInstance()->current_test_info()->name();
};

TEST_F(PastRunTest, RunReadsBackAsItWasWritten) {
  const auto run = read_past_run(made("2031-03-14", kFriday));
  ASSERT_TRUE(run.ok()) << run.failure().text();
  EXPECT_EQ(run->as_of.instant, kFriday);
  EXPECT_EQ(run->grid.axis, Axis::log_moneyness);
  EXPECT_EQ(run->grid.points, (std::vector{-0.1, 0.1}));
  EXPECT_EQ(run->grid.tenor_words, (std::vector<std::string>{"3M"}));
  EXPECT_EQ(run->compare.tolerance, 0.02);
  EXPECT_EQ(run->compare.deviations, 4);
  EXPECT_EQ(run->compare.most_nights, 9);
  ASSERT_EQ(run->underlyings.size(), 2U);
  const auto& u = run->underlyings.at("=A,B");
  EXPECT_EQ(u.record.status, Status::carried);
  EXPECT_EQ(u.record.carried_from, "2031-03-13T16:00:00-05:00");
  ASSERT_EQ(u.prints.size(), 1U);
  EXPECT_EQ(u.prints[0].print, "00112233aabbccdd");
  EXPECT_EQ(quotes::format_instant(kClock, u.prints[0].expiry), "2031-06-20T16:00:00-05:00");
  EXPECT_EQ(run->underlyings.at("NONE").record.status, Status::refused);
  const auto stored = read_past_surface(*run, "=A,B");
  ASSERT_TRUE(stored.ok()) << stored.failure().text();
  EXPECT_EQ(stored->surface.underlying, "=A,B");
}

TEST_F(PastRunTest, RunOfAVersionWithoutExpiriesAndCompareIsTakenAtTheDefaults) {
  const auto folder = made("2031-03-14", kFriday, R"({"zone": "", "grid": {"axis": "strike",
      "points": [], "tenors": []}})");
  fs::remove(folder + "/expiries.csv");
  const auto run = read_past_run(folder);
  ASSERT_TRUE(run.ok()) << run.failure().text();
  EXPECT_EQ(run->grid.axis, GridOptions{}.axis);
  EXPECT_EQ(run->compare.tolerance, CompareOptions{}.tolerance);
  EXPECT_TRUE(run->underlyings.at("=A,B").prints.empty());
}

TEST_F(PastRunTest, WhatIsNoRunIsRefusedByName) {
  const auto fault = [](const Result<PastRun>& run) {
    EXPECT_FALSE(run.ok());
    return run.failure().fault;
  };
  EXPECT_EQ(fault(read_past_run(out_ + "/nowhere")), Fault::no_input);
  const auto folder = made("2031-03-14", kFriday);
  spill(folder + "/expiries.csv", "underlying,expiry\n");
  EXPECT_EQ(fault(read_past_run(folder)), Fault::not_quotes);
  spill(folder + "/expiries.csv",
        std::string(kExpiriesHeader) + "OTHER,2031-06-20T16:00:00-05:00,1,1,1,,00\n");
  EXPECT_EQ(fault(read_past_run(folder)), Fault::not_quotes);
  for (const char* text : {"", "{}", "[]", "{\"as_of\": 1}", "null"}) {
    spill(folder + "/run.json", text);
    EXPECT_EQ(fault(read_past_run(folder)), Fault::not_quotes) << text;
  }
}

TEST_F(PastRunTest, SurfaceOfAnotherNightIsRefused) {
  const auto folder = made("2031-03-14", kFriday);
  auto run = read_past_run(folder);
  ASSERT_TRUE(run.ok());
  run->as_of.instant += 1h;
  EXPECT_EQ(read_past_surface(*run, "=A,B").failure().fault, Fault::not_quotes);
  EXPECT_EQ(read_past_surface(*run, "NONE").failure().fault, Fault::no_input);
}

TEST_F(PastRunTest, LastCompleteRunBeforeTheDateIsFound) {
  made("2031-03-12", kFriday - 48h);
  made("2031-03-14", kFriday);
  made("2031-03-14-refused", kFriday);
  made(".partial-2031-03-15", kFriday + 24h);
  made("2031-03-17", kFriday + 72h);
  spill(out_ + "/2031-03-13/run.json", "{");
  std::vector<std::string> remarks;
  const auto found = [&](const std::string& date, quotes::Instant as_of) {
    remarks.clear();
    const auto run = find_past_run(out_, date, as_of, remarks);
    return run ? fs::path(run->folder).filename().string() : "";
  };
  EXPECT_EQ(found("2031-03-17", kFriday + 72h), "2031-03-14");
  EXPECT_TRUE(remarks.empty());
  EXPECT_EQ(found("2031-03-14", kFriday), "2031-03-12");
  EXPECT_EQ(remarks.size(), 1U) << "the broken run of the 13th is said";
  EXPECT_EQ(found("2031-03-12", kFriday - 48h), "");
  // A run dated before but taken later, by another clock, is no past.
  EXPECT_EQ(found("2031-03-18", kFriday + 1h), "2031-03-14");
  EXPECT_FALSE(find_past_run(out_ + "/nowhere", "2031-03-17", kFriday, remarks));
}

}  // namespace
}  // namespace duskgrid::publish
