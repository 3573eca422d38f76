// Nights one after another: what a run finds of the one before, and leaves for the next.
#include "night/changes.h"

#include <gtest/gtest.h>

#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <nlohmann/json.hpp>

#include "night/run.h"
#include "pricing/black.h"

namespace duskgrid::night {
namespace {

namespace fs = std::filesystem;
using nlohmann::json;

std::string content_of(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

// One expiry of a flat smile in cents, 98 days from the 14th.
std::string rows_of(const std::string& name, double vol, double t = 98 / 365.0) {
  std::string rows;
  for (int i = -5; i <= 5; ++i)
    for (const auto side : {quotes::PutCall::call, quotes::PutCall::put}) {
      const double strike = 100 + 4 * i;
      const double price = pricing::black_price({side, 100, strike, 1}, vol * std::sqrt(t));
      char row[200];
      std::snprintf(row, sizeof row, "%s,2031-06-20,%g,%c,%.4f,%.4f,100\n", name.c_str(), strike,
                    side == quotes::PutCall::call ? 'C' : 'P', price * 0.99, price * 1.01);
      rows += row;
    }
  return rows;
}

class NightsTest : public testing::Test {
 protected:
  void SetUp() override { fs::create_directories(folder_); }
  void TearDown() override { fs::remove_all(folder_); }

  NightOutcome run(const std::string& date, const std::string& rows, const std::string& more = "") {
    std::ofstream(folder_ + "/quotes.csv", std::ios::binary)
        << "underlying,expiry,strike,put_call,bid,ask,underlying_price\n" + rows;
    const auto config =
        parse_config("as_of = '" + date + "'\n" + more +
                         "\n[[source]]\nfiles = 'quotes.csv'\nexercise = 'european'\n",
                     "night.toml", folder_);
    EXPECT_TRUE(config.ok());
    auto outcome = run_night(*config, {out(), 1, {}});
    if (outcome) return std::move(*outcome);
    ADD_FAILURE() << outcome.failure().text();
    return {};
  }
  std::string out() const { return folder_ + "/out"; }
  json account(const std::string& date) const {
    return json::parse(content_of(out() + "/" + date + "/run.json"));
  }
  std::string changes(const std::string& date) const {
    return content_of(out() + "/" + date + "/changes.csv");
  }

  std::string folder_ = testing::TempDir() + "nights_test_" +
                        testing::UnitTest::GetInstance()->current_test_info()->name();
};

TEST_F(NightsTest, FirstNightHasNothingToCompareWith) {
  run("2031-03-14", rows_of("HALYRD", 0.2));
  EXPECT_EQ(changes("2031-03-14"), publish::kChangesHeader);
  EXPECT_EQ(account("2031-03-14")["previous"], nullptr);
}

TEST_F(NightsTest, SecondNightNamesTheFirstAndFlagsWhatMoved) {
  run("2031-03-14", rows_of("HALYRD", 0.2) + rows_of("KELPWK", 0.3));
  run("2031-03-17", rows_of("HALYRD", 0.26, 95 / 365.0) + rows_of("KELPWK", 0.301, 95 / 365.0));
  const auto record = account("2031-03-17");
  EXPECT_EQ(record["previous"]["folder"], "2031-03-14");
  EXPECT_EQ(record["previous"]["sha256"],
            publish::digest_file(out() + "/2031-03-14/run.json")->sha256);
  EXPECT_EQ(record["underlyings"]["HALYRD"]["status"], "flagged");
  EXPECT_NE(record["underlyings"]["HALYRD"]["message"].get<std::string>().find("to sign off"),
            std::string::npos);
  EXPECT_EQ(record["underlyings"]["KELPWK"]["status"], "published");
}

TEST_F(NightsTest, EqualQuotesAreStale) {
  run("2031-03-14", rows_of("HALYRD", 0.2));
  run("2031-03-17", rows_of("HALYRD", 0.2));
  EXPECT_NE(changes("2031-03-17").find("HALYRD,stale,"), std::string::npos);
  EXPECT_EQ(account("2031-03-17")["underlyings"]["HALYRD"]["status"], "flagged");
}

TEST_F(NightsTest, NameThatIsGoneIsCarriedSoLongAndThenForgotten) {
  run("2031-03-14", rows_of("HALYRD", 0.2) + rows_of("KELPWK", 0.3));
  const std::string most = "[carry]\nmost_business_days = 2\n";
  const auto status = [&](const char* date) -> json {
    run(date, rows_of("HALYRD", 0.2), most);
    return account(date)["underlyings"].value("KELPWK", json::object()).value("status", "unknown");
  };
  EXPECT_EQ(status("2031-03-17"), "carried");
  EXPECT_EQ(status("2031-03-18"), "carried");
  EXPECT_EQ(account("2031-03-18")["underlyings"]["KELPWK"]["carried_from"],
            "2031-03-14T16:00:00+00:00");
  EXPECT_EQ(status("2031-03-19"), "refused");
  EXPECT_NE(changes("2031-03-19").find("KELPWK,vanished-underlying,"), std::string::npos);
  EXPECT_EQ(status("2031-03-20"), "unknown");
}

TEST_F(NightsTest, RunningANightAgainGivesTheSameBytesAndOneNightOfHistory) {
  run("2031-03-14", rows_of("HALYRD", 0.2));
  const std::string monday = rows_of("HALYRD", 0.21, 95 / 365.0);
  run("2031-03-17", monday);
  const auto first = content_of(out() + "/2031-03-17/run.json");
  const auto lines = changes("2031-03-17");
  run("2031-03-17", monday);
  EXPECT_EQ(content_of(out() + "/2031-03-17/run.json"), first);
  EXPECT_EQ(changes("2031-03-17"), lines);
  auto history = publish::History::open(out() + "/history.sqlite", publish::History::Access::read);
  ASSERT_TRUE(history.ok());
  EXPECT_EQ((*history)->series("HALYRD", "", "")->size(), 2U);
  EXPECT_EQ((*history)->surface("2031-03-17", "HALYRD").value(),
            content_of(out() + "/2031-03-17/surfaces/HALYRD.json"));
}

TEST_F(NightsTest, TypicalChangeComesFromTheHistory) {
  const char* dates[] = {"2031-03-10", "2031-03-11", "2031-03-12", "2031-03-13"};
  for (int i = 0; i < 4; ++i) run(dates[i], rows_of("HALYRD", i % 2 == 0 ? 0.2 : 0.201));
  const std::string more = "[compare]\ntolerance = 0.05\ntimes_typical = 5\nmost_nights = 10\n";
  run("2031-03-14", rows_of("HALYRD", 0.23), more + "least_nights = 4\n");
  EXPECT_NE(changes("2031-03-14").find(",history\n"), std::string::npos);
  run("2031-03-14", rows_of("HALYRD", 0.23), more + "least_nights = 5\n");
  EXPECT_EQ(changes("2031-03-14").find(",history\n"), std::string::npos);
}

TEST_F(NightsTest, HistoryThatCannotBeWrittenIsARemarkAndALaterRunRepairsIt) {
  fs::create_directories(out());
  std::ofstream(out() + "/history.sqlite") << std::string(5000, 'x');
  const auto outcome = run("2031-03-14", rows_of("HALYRD", 0.2));
  ASSERT_FALSE(outcome.remarks.empty());
  EXPECT_NE(outcome.remarks.back().find("history"), std::string::npos);
  EXPECT_TRUE(fs::exists(outcome.folder + "/grid.csv"));
  fs::remove(out() + "/history.sqlite");
  EXPECT_TRUE(run("2031-03-14", rows_of("HALYRD", 0.2)).remarks.size() == 1) << "replaced";
  EXPECT_TRUE(
      publish::History::open(out() + "/history.sqlite", publish::History::Access::read).ok());
}

TEST_F(NightsTest, HistoryKeepsNoSurfacesWhereNoneAreWanted) {
  run("2031-03-14", rows_of("HALYRD", 0.2), "[history]\nsurfaces = false\n");
  auto history = publish::History::open(out() + "/history.sqlite", publish::History::Access::read);
  ASSERT_TRUE(history.ok());
  EXPECT_EQ((*history)->surface("2031-03-14", "HALYRD").value(), std::nullopt);
  EXPECT_EQ((*history)->series("HALYRD", "", "")->size(), 1U);
}

TEST_F(NightsTest, NightThatMarksNothingIsNoNightOfTheHistoryBesideAGoodOne) {
  run("2031-03-14", rows_of("HALYRD", 0.2));
  const auto outcome = run("2031-03-14", "HALYRD,2031-06-20,100,C,0,1,100\n");
  EXPECT_EQ(fs::path(outcome.folder).filename(), "2031-03-14-refused");
  auto history = publish::History::open(out() + "/history.sqlite", publish::History::Access::read);
  ASSERT_TRUE(history.ok());
  EXPECT_EQ((*history)->series("HALYRD", "", "")->front().underlyings[0].record.status,
            publish::Status::published);
}

TEST_F(NightsTest, BrokenSurfaceOfTheNightBeforeIsARemark) {
  run("2031-03-14", rows_of("HALYRD", 0.2));
  std::ofstream(out() + "/2031-03-14/surfaces/HALYRD.json") << "{";
  const auto outcome = run("2031-03-17", rows_of("HALYRD", 0.21, 95 / 365.0));
  ASSERT_EQ(outcome.remarks.size(), 1U);
  EXPECT_NE(outcome.remarks[0].find("cannot be read"), std::string::npos);
  EXPECT_NE(changes("2031-03-17").find("HALYRD,new-underlying,"), std::string::npos);
}

}  // namespace
}  // namespace duskgrid::night
