#include "publish/history.h"

#include <gtest/gtest.h>
#include <sqlite3.h>

#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "market/day_count.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;
using namespace std::chrono_literals;
using Access = History::Access;

const quotes::Clock kClock{"", std::chrono::minutes{-300}};
const quotes::Instant kFriday = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
// A volatility from a total variance and back.
constexpr double kRounding = 1e-14;

std::string json_of(const std::string& name) {
  return "{\"form\": \"a surface of " + name + "\"}\n";
}

HistoryUnderlying underlying(const std::string& name, double vol,
                             Status status = Status::published) {
  HistoryUnderlying u;
  u.record = {name, status, true, 1, 40, 39, 2, "", "all is well"};
  if (status == Status::refused) return u;
  u.term_slope = 0.01;
  u.slices = {{kFriday + 24h * 98, 98 / 365.0, 101.5, 0.99, vol, -0.3, 1.5, 40, 39, 0.001}};
  u.surface = packed_surface(json_of(name));
  return u;
}

HistoryNight night(int days, std::vector<HistoryUnderlying> underlyings) {
  const auto as_of = kFriday + 24h * days;
  return {quotes::format_date(kClock, as_of), {as_of, kClock}, "0.1.0", std::move(underlyings)};
}

class HistoryTest : public testing::Test {
 protected:
  void SetUp() override { fs::create_directories(folder_); }
  void TearDown() override { fs::remove_all(folder_); }

  std::unique_ptr<History> opened(Access access = Access::write) {
    auto history = History::open(path_, access);
    if (history) return std::move(*history);
    ADD_FAILURE() << history.failure().text();
    return nullptr;
  }
  // What another program does to the file.
  void execute(const char* sql) {
    sqlite3* handle = nullptr;
    ASSERT_EQ(sqlite3_open(path_.c_str(), &handle), SQLITE_OK);
    char* error = nullptr;
    EXPECT_EQ(sqlite3_exec(handle, sql, nullptr, nullptr, &error), SQLITE_OK) << error;
    sqlite3_free(error);
    sqlite3_close(handle);
  }
  void refused(Access access, const std::string& word) {
    const auto history = History::open(path_, access, 50ms);
    ASSERT_FALSE(history.ok());
    EXPECT_EQ(history.failure().fault,
              access == Access::read ? Fault::no_input : Fault::cannot_create);
    EXPECT_EQ(history.failure().where, path_);
    EXPECT_NE(history.failure().detail.find(word), std::string::npos) << history.failure().detail;
  }

  const std::string folder_ = testing::TempDir() + "history_test_" +
                              testing::UnitTest::GetInstance()->current_test_info()->name();
  const std::string path_ = folder_ + "/history.sqlite";
};

TEST_F(HistoryTest, NightReadsBackAsItWasWritten) {
  ASSERT_TRUE(opened()->write_night(night(0, {underlying("HALYRD", 0.2)})).ok());
  auto history = opened(Access::read);
  const auto series = history->series("HALYRD", "", "");
  ASSERT_TRUE(series.ok());
  ASSERT_EQ(series->size(), 1U);
  const auto& read = series->front();
  const auto& u = read.underlyings.front();
  EXPECT_EQ(read.date, "2031-03-14");
  EXPECT_EQ(read.as_of.instant, kFriday);
  EXPECT_EQ(read.as_of.clock.offset, kClock.offset);
  EXPECT_EQ(read.version, "0.1.0");
  EXPECT_EQ(u.record.status, Status::published);
  EXPECT_TRUE(u.record.certified);
  EXPECT_EQ(u.record.used, 40);
  EXPECT_EQ(u.record.inside, 39);
  EXPECT_EQ(u.record.violations, 2);
  EXPECT_EQ(u.record.message, "all is well");
  EXPECT_EQ(u.term_slope, 0.01);
  ASSERT_EQ(u.slices.size(), 1U);
  const auto &s = u.slices[0], wrote = underlying("HALYRD", 0.2).slices[0];
  EXPECT_EQ(s.expiry, wrote.expiry);
  EXPECT_EQ(s.year_fraction, wrote.year_fraction);
  EXPECT_EQ(s.forward, wrote.forward);
  EXPECT_EQ(s.discount_factor, wrote.discount_factor);
  EXPECT_EQ(s.vol, wrote.vol);
  EXPECT_EQ(s.skew, wrote.skew);
  EXPECT_EQ(s.curvature, wrote.curvature);
  EXPECT_EQ(s.used, wrote.used);
  EXPECT_EQ(s.inside, wrote.inside);
  EXPECT_EQ(s.rms_vol, wrote.rms_vol);
  EXPECT_EQ(history->surface("2031-03-14", "HALYRD").value(), json_of("HALYRD"));
  EXPECT_EQ(history->surface("2031-03-15", "HALYRD").value(), std::nullopt);
}

TEST_F(HistoryTest, SurfaceThatCannotBeUnpackedIsSaidToBeSo) {
  auto u = underlying("A", 0.2);
  u.surface = "not a frame";
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(0, {u})).ok());
  EXPECT_FALSE(history->surface("2031-03-14", "A").ok());
  // What unpacks to over 64 MiB is no surface.
  u.surface = packed_surface(std::string(std::size_t{65} << 20, ' '));
  ASSERT_TRUE(history->write_night(night(0, {u})).ok());
  EXPECT_FALSE(history->surface("2031-03-14", "A").ok());
}

TEST_F(HistoryTest, HostileNamesAreTextAndNothingElse) {
  const std::vector<std::string> names{"'; DROP TABLE nights; --", "\xC3\xA9\"", "",
                                       std::string("A\0B", 3), "%"};
  std::vector<HistoryUnderlying> all;
  for (const auto& name : names) all.push_back(underlying(name, 0.2));
  ASSERT_TRUE(opened()->write_night(night(0, all)).ok());
  auto history = opened(Access::read);
  for (const auto& name : names) {
    const auto series = history->series(name, "", "");
    ASSERT_TRUE(series.ok());
    ASSERT_EQ(series->size(), 1U) << name;
    EXPECT_EQ(series->front().underlyings.front().record.name, name);
  }
  EXPECT_TRUE(history->series("' OR ''='", "", "")->empty());
}

TEST_F(HistoryTest, NightWrittenAgainIsReplacedWhole) {
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(0, {underlying("A", 0.2), underlying("B", 0.3)})).ok());
  ASSERT_TRUE(history->write_night(night(3, {underlying("A", 0.25)})).ok());
  ASSERT_TRUE(history->write_night(night(0, {underlying("A", 0.21)})).ok());
  EXPECT_TRUE(history->series("B", "", "")->empty());
  EXPECT_EQ(history->surface("2031-03-14", "B").value(), std::nullopt);
  const auto series = history->series("A", "", "");
  ASSERT_EQ(series->size(), 2U);
  EXPECT_EQ((*series)[0].underlyings[0].slices[0].vol, 0.21);
  EXPECT_EQ((*series)[1].underlyings[0].slices[0].vol, 0.25);
}

TEST_F(HistoryTest, NightThatCannotBeWrittenLeavesTheOldOne) {
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(0, {underlying("A", 0.2)})).ok());
  // Twice the same name breaks a key half way.
  const auto failed = history->write_night(night(0, {underlying("A", 0.3), underlying("A", 0.4)}));
  ASSERT_FALSE(failed.ok());
  EXPECT_EQ(failed.failure().fault, Fault::cannot_create);
  const auto series = history->series("A", "", "");
  ASSERT_EQ(series->size(), 1U);
  EXPECT_EQ(series->front().underlyings[0].slices[0].vol, 0.2);
}

TEST_F(HistoryTest, SeriesKeepsToItsDates) {
  auto history = opened();
  for (const int day : {0, 3, 4, 5})
    ASSERT_TRUE(history->write_night(night(day, {underlying("A", 0.2)})).ok());
  const auto dates = [&](const char* from, const char* to) {
    std::string out;
    const auto series = history->series("A", from, to);
    for (const auto& n : *series) out += n.date.substr(8) + " ";
    return out;
  };
  EXPECT_EQ(dates("", ""), "14 17 18 19 ");
  EXPECT_EQ(dates("2031-03-17", "2031-03-18"), "17 18 ");
  EXPECT_EQ(dates("2031-03-18", ""), "18 19 ");
  EXPECT_EQ(dates("", "2031-03-14"), "14 ");
  EXPECT_EQ(dates("2032-01-01", ""), "");
}

TEST_F(HistoryTest, TermsAreThoseOfMarkedNightsBeforeADateInOrder) {
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(3, {underlying("A", 0.22)})).ok());
  ASSERT_TRUE(history->write_night(night(0, {underlying("A", 0.21), underlying("B", 0.5)})).ok());
  ASSERT_TRUE(history->write_night(night(4, {underlying("A", 0.9, Status::carried)})).ok());
  ASSERT_TRUE(history->write_night(night(5, {underlying("A", 0, Status::refused)})).ok());
  ASSERT_TRUE(history->write_night(night(6, {underlying("A", 0.23, Status::flagged)})).ok());
  ASSERT_TRUE(history->write_night(night(7, {underlying("A", 0.99)})).ok());
  const auto vols = [&](int most) {
    std::vector<double> out;
    const auto terms = history->terms("2031-03-21", most);
    for (const auto& n : terms->at("A")) out.push_back(n.at(0).vol);
    return out;
  };
  EXPECT_EQ(vols(20), (std::vector{0.21, 0.22, 0.23}));
  EXPECT_EQ(vols(2), (std::vector{0.23}));  // the other of the two was refused
  EXPECT_EQ(history->terms("2031-03-21", 20)->at("B").size(), 1U);
  EXPECT_TRUE(history->terms("2031-03-14", 20)->empty());
}

TEST_F(HistoryTest, NumbersThatDoNotExistAreNoValues) {
  auto u = underlying("A", 0.2);
  u.term_slope = quotes::kAbsent;
  u.slices[0].rms_vol = quotes::kAbsent;
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(0, {u})).ok());
  const auto series = history->series("A", "", "");
  EXPECT_TRUE(std::isnan(series->front().underlyings[0].term_slope));
  EXPECT_TRUE(std::isnan(series->front().underlyings[0].slices[0].rms_vol));
}

// The first schema, as its version left it.
constexpr const char* kSchemaOne = R"(
CREATE TABLE nights (id INTEGER PRIMARY KEY, date TEXT NOT NULL UNIQUE, as_of TEXT NOT NULL,
  as_of_seconds INTEGER NOT NULL, zone TEXT NOT NULL, offset_minutes INTEGER NOT NULL,
  version TEXT NOT NULL) STRICT;
CREATE TABLE names (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE) STRICT;
CREATE TABLE underlyings (night INTEGER NOT NULL REFERENCES nights, name INTEGER NOT NULL
  REFERENCES names, status TEXT NOT NULL, message TEXT NOT NULL, carried_from TEXT,
  certified INTEGER NOT NULL, used INTEGER NOT NULL, inside INTEGER NOT NULL,
  violations INTEGER NOT NULL, term_slope REAL, PRIMARY KEY (night, name)) STRICT, WITHOUT ROWID;
CREATE TABLE slices (night INTEGER NOT NULL REFERENCES nights, name INTEGER NOT NULL
  REFERENCES names, expiry INTEGER NOT NULL, year_fraction REAL NOT NULL, forward REAL NOT NULL,
  discount_factor REAL NOT NULL, vol REAL NOT NULL, skew REAL, curvature REAL,
  used INTEGER NOT NULL, inside INTEGER NOT NULL, rms_vol REAL,
  PRIMARY KEY (night, name, expiry)) STRICT, WITHOUT ROWID;
INSERT INTO nights VALUES (7, '2031-03-13', '2031-03-13T16:00:00-05:00', 1931202000, '', -300, '0');
INSERT INTO names VALUES (3, 'HALYRD');
INSERT INTO underlyings VALUES (7, 3, 'published', '', NULL, 1, 10, 9, 0, 0.5);
INSERT INTO slices VALUES (7, 3, 1939755600, 0.27, 100, 0.99, 0.19, -0.2, 1, 10, 9, 0.002);
PRAGMA application_id = 1146309447;
PRAGMA user_version = 1;
)";

TEST_F(HistoryTest, OlderSchemaIsBroughtUpWithWhatIsInIt) {
  for (const auto access : {Access::read, Access::write}) {
    fs::remove(path_);
    execute(kSchemaOne);
    auto history = opened(access);
    ASSERT_TRUE(history);
    const auto series = history->series("HALYRD", "", "");
    ASSERT_TRUE(series.ok()) << series.failure().text();
    ASSERT_EQ(series->size(), 1U);
    EXPECT_EQ(series->front().underlyings[0].slices[0].vol, 0.19);
    EXPECT_EQ(history->surface("2031-03-13", "HALYRD").value(), std::nullopt);
  }
  auto history = opened();
  ASSERT_TRUE(history->write_night(night(0, {underlying("HALYRD", 0.2)})).ok());
  EXPECT_EQ(history->series("HALYRD", "", "")->size(), 2U);
}

TEST_F(HistoryTest, NewerSchemaIsRefusedUntouched) {
  opened();
  execute("PRAGMA user_version = 99");
  refused(Access::read, "schema 99");
  refused(Access::write, "schema 99");
}

TEST_F(HistoryTest, WhatIsNoHistoryIsRefused) {
  refused(Access::read, "no history");
  execute("CREATE TABLE theirs (x)");
  refused(Access::read, "not a history");
  refused(Access::write, "not a history");
  std::ofstream(path_, std::ios::trunc) << std::string(5000, 'x');
  refused(Access::read, "damaged");
  refused(Access::write, "damaged");
  fs::remove(path_);
  fs::create_directory(path_);
  refused(Access::read, "no history");
  refused(Access::write, "cannot be used");
}

TEST_F(HistoryTest, EmptyFileIsFilledByAWriterAndRefusedByAReader) {
  std::ofstream(path_).flush();
  refused(Access::read, "not a history");
  ASSERT_TRUE(opened()->write_night(night(0, {underlying("A", 0.2)})).ok());
  EXPECT_EQ(opened(Access::read)->series("A", "", "")->size(), 1U);
}

TEST_F(HistoryTest, LockOfAnotherProgramIsSaidAndReadersGoOn) {
  ASSERT_TRUE(opened()->write_night(night(0, {underlying("A", 0.2)})).ok());
  sqlite3* other = nullptr;
  ASSERT_EQ(sqlite3_open(path_.c_str(), &other), SQLITE_OK);
  ASSERT_EQ(sqlite3_exec(other, "BEGIN IMMEDIATE", nullptr, nullptr, nullptr), SQLITE_OK);
  auto history = History::open(path_, Access::write, 50ms);
  ASSERT_TRUE(history.ok()) << history.failure().text();
  const auto written = (*history)->write_night(night(3, {underlying("A", 0.3)}));
  ASSERT_FALSE(written.ok());
  EXPECT_NE(written.failure().detail.find("locked"), std::string::npos);
  EXPECT_EQ(opened(Access::read)->series("A", "", "")->size(), 1U);
  sqlite3_close(other);
  EXPECT_TRUE((*history)->write_night(night(3, {underlying("A", 0.3)})).ok());
}

TEST_F(HistoryTest, NightAtNoKnownInstantIsRefused) {
  ASSERT_TRUE(opened()->write_night(night(0, {underlying("A", 0.2)})).ok());
  execute("UPDATE nights SET as_of_seconds = 9000000000000000000");
  EXPECT_FALSE(opened(Access::read)->series("A", "", "").ok());
  execute("UPDATE nights SET as_of_seconds = 0, zone = 'No/Where'");
  EXPECT_FALSE(opened(Access::read)->series("A", "", "").ok());
}

surface::Surface two_slices() {
  surface::Surface out{"A", {}, {}};
  for (const auto& [days, backbone] :
       {std::pair(98, surface::SliceParameters{0.012, -0.4, 0.15}), {280, {0.04, -0.3, 0.3}}}) {
    const auto expiry = kFriday + 24h * days;
    out.slices.push_back(
        {expiry, market::year_fraction(kFriday, expiry), 100.0 + days, 0.99, backbone, -0.3, 0.3});
  }
  return out;
}

TEST(HistorySlice, SkewAndCurvatureAreTheDerivativesOfVolatility) {
  // Central differences with step h leave h^2 / 6 and h^2 / 12 of the third and fourth derivatives,
  // some hundreds at such skews, and rounding over h^2: 5e-7 and 1e-8.
  constexpr double kStep = 1e-4, kDifferences = 1e-6;
  const auto surface = two_slices();
  for (const auto& slice : surface.slices) {
    const auto figures = history_slice(slice);
    const auto vol = [&](double k) {
      return std::sqrt(surface::smile_of(slice, k).w / slice.year_fraction);
    };
    EXPECT_NEAR(figures.vol, vol(0), kRounding);
    EXPECT_NEAR(figures.skew, (vol(kStep) - vol(-kStep)) / (2 * kStep), kDifferences);
    EXPECT_NEAR(figures.curvature, (vol(kStep) - 2 * vol(0) + vol(-kStep)) / (kStep * kStep),
                kDifferences);
  }
}

TEST(AtMaturity, IsTheSurfaceItselfUnderTheRuleOfVariance) {
  const auto surface = two_slices();
  std::vector<HistorySlice> slices;
  for (const auto& s : surface.slices) slices.push_back(history_slice(s));
  for (const double t : {0.05, slices[0].year_fraction, 0.5, slices[1].year_fraction, 2.0}) {
    const auto figures = at_maturity(slices, kFriday, t);
    ASSERT_TRUE(figures) << t;
    const auto point = surface::point_at(surface, 0, t);
    const double vol = std::sqrt(point.w / t), skew = 0.5 * point.dw_dk / (vol * t);
    EXPECT_NEAR(figures->vol, vol, kRounding) << t;
    EXPECT_NEAR(figures->skew, skew, kRounding) << t;
    EXPECT_NEAR(figures->curvature, (0.5 * point.d2w_dk2 / t - skew * skew) / vol, 1e-12) << t;
    EXPECT_DOUBLE_EQ(figures->forward, surface::carried_at(surface, t).forward);
  }
  EXPECT_FALSE(at_maturity({}, kFriday, 1));
  EXPECT_FALSE(at_maturity(slices, kFriday, 0));
}

TEST(TermSlope, IsThatBetweenAQuarterAndAYear) {
  const auto surface = two_slices();
  EXPECT_NEAR(term_slope(surface),
              (surface::vol_at(surface, 0, 1) - surface::vol_at(surface, 0, 0.25)) / 0.75,
              kRounding);
}

}  // namespace
}  // namespace duskgrid::publish
