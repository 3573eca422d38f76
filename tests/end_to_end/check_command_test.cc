// Stored surfaces and grids checked from the command line: what is said of a break, in whose terms,
// and what several files give.
#include <gtest/gtest.h>

#include "end_to_end/program.h"
#include "market/day_count.h"
#include "publish/surface_json.h"

namespace duskgrid::end_to_end {
namespace {

using namespace std::chrono_literals;

class CheckCommand : public testing::Test {
 protected:
  CheckCommand() {
    const quotes::Instant as_of = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
    const auto slice = [&](int days, surface::SliceParameters backbone) {
      const auto expiry = as_of + 24h * days;
      return surface::Slice{expiry, market::year_fraction(as_of, expiry), 101, 0.99, backbone, -0.4,
                            0.3};
    };
    as_of_ = {as_of, {"", -300min}};
    surface_ = {"HALYRD", 100, {slice(98, {0.01, -0.5, 0.15}), slice(189, {0.03, -0.4, 0.25})}};
  }

  std::string path(const std::string& name) const { return (scratch_ / name).string(); }
  std::string stored(const surface::Surface& surface, const std::string& name = "HALYRD.json") {
    const publish::StoredSurface s{as_of_, surface};
    spill(path(name), publish::surface_to_json(s));
    return path(name);
  }
  std::string grid(const std::string& text) {
    spill(path("grid.csv"), text);
    return path("grid.csv");
  }
  surface::Surface swapped() const {
    auto swapped = surface_;
    std::swap(swapped.slices[0].backbone, swapped.slices[1].backbone);
    return swapped;
  }
  // The violations printed, in which no word stands for a number.
  std::vector<Row> lines(const Ran& ran) {
    for (const char* word : {"nan", "inf", "  "})
      EXPECT_EQ(ran.out.find(word), std::string::npos) << ran.out;
    EXPECT_EQ(ran.err.find("nan"), std::string::npos) << ran.err;
    EXPECT_EQ(ran.err.find("  "), std::string::npos) << ran.err;
    spill(path("out.csv"), ran.out);
    return read_table(path("out.csv"));
  }

  Scratch scratch_;
  quotes::AsOf as_of_;
  surface::Surface surface_;
};

void expect_holds(const std::string& text, const std::string& piece) {
  EXPECT_NE(text.find(piece), std::string::npos) << text;
}

TEST_F(CheckCommand, SoundSurfaceIsCertified) {
  const auto file = stored(surface_);
  const auto ran = duskgrid({"check", file});
  EXPECT_EQ(ran.status, 0) << ran.err;
  EXPECT_EQ(ran.out, "");
  EXPECT_EQ(ran.err, file + ": HALYRD: 2 expiries, certified: proved free of arbitrage\n");
  surface_.slices.pop_back();
  expect_holds(duskgrid({"check", stored(surface_)}).err, "HALYRD: 1 expiry, certified");
}

TEST_F(CheckCommand, CrossingIsSaidByExpiriesAndTradedAtTheMoney) {
  const auto file = stored(swapped());
  const auto ran = duskgrid({"check", file});
  EXPECT_EQ(ran.status, 3);
  EXPECT_EQ(ran.err.rfind(file + ": HALYRD: 2 expiries, not certified", 0), 0u) << ran.err;
  expect_holds(ran.err,
               "calendar broken from 2031-06-20T16:00:00-05:00 to 2031-09-19T16:00:00-05:00");
  expect_holds(ran.err, "strike ");
  expect_holds(ran.err, " (k ");
  const auto rows = lines(ran);
  ASSERT_FALSE(rows.empty());
  EXPECT_EQ(rows[0].at("kind"), "calendar");
  // At the money D F (2 N(s / 2) - 1) for s^2 = 0.03 less that for 0.01, by tables of N.
  EXPECT_GT(std::stod(rows[0].at("amount")), 0.99 * 101 * (0.0690 - 0.0399));
}

TEST_F(CheckCommand, ButterflyIsSaidByExpiryAndStrike) {
  surface_.slices[0].backbone = {0.01, -0.2, 0.5};
  const auto ran = duskgrid({"check", stored(surface_)});
  EXPECT_EQ(ran.status, 3);
  expect_holds(ran.err, "butterfly broken at 2031-06-20T16:00:00-05:00, strike ");
  bool found = false;
  for (const auto& row : lines(ran)) {
    EXPECT_GT(std::stod(row.at("amount")), 0);
    found = found || row.at("kind") == "butterfly";
  }
  EXPECT_TRUE(found);
}

TEST_F(CheckCommand, BrokenWingIsNamedWithItsSide) {
  surface_.slices[1].backbone = {0.8, 0.5, 3.0};
  const auto ran = duskgrid({"check", stored(surface_)});
  EXPECT_EQ(ran.status, 3);
  expect_holds(
      ran.err,
      "butterfly broken at 2031-09-19T16:00:00-05:00 in the right wing, the most at strike");
  EXPECT_EQ(ran.err.find("inf"), std::string::npos) << ran.err;
  lines(ran);
}

// An overlay that no fit gives takes the variance below zero at the money.
TEST_F(CheckCommand, VarianceBelowZeroHasNoTrade) {
  surface_.slices[0].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0, 0, -0.2, 0}};
  surface_.slices.pop_back();
  const auto ran = duskgrid({"check", stored(surface_)});
  EXPECT_EQ(ran.status, 3);
  expect_holds(ran.err, "positive broken at 2031-06-20T16:00:00-05:00, strike ");
  lines(ran);
}

TEST_F(CheckCommand, BadFileIsSaidAndTheOthersAreChecked) {
  spill(path("bad.json"), "{\"form\": ");
  const auto good = stored(surface_), broken = stored(swapped(), "BROKEN.json");
  const auto ran = duskgrid({"check", path("bad.json"), broken, path("none.csv"), good});
  EXPECT_EQ(ran.status, 66);
  expect_holds(ran.err, "duskgrid: " + path("bad.json"));
  expect_holds(ran.err, broken + ": HALYRD: 2 expiries, not certified");
  expect_holds(ran.err, "none.csv");
  expect_holds(ran.err, good + ": HALYRD: 2 expiries, certified");
  EXPECT_EQ(duskgrid({"check", path("bad.json"), broken}).status, 65);
  EXPECT_EQ(duskgrid({"check", good, broken}).status, 3);
}

TEST_F(CheckCommand, GridWithoutDatesIsSaidByYearFraction) {
  const auto file = grid(
      "strike,vol,forward,year_fraction\n90,0.20,100,0.25\n100,0.35,100,0.25\n"
      "110,0.20,100,0.25\n");
  const auto ran = duskgrid({"check", file});
  EXPECT_EQ(ran.status, 3);
  EXPECT_EQ(ran.err.rfind(file + ": 1 expiry or tenor, arbitrages found: ", 0), 0u) << ran.err;
  expect_holds(ran.err, "; the most at t=0.25, strike ");
  const auto rows = lines(ran);
  ASSERT_FALSE(rows.empty());
  for (const auto& row : rows) {
    EXPECT_EQ(row.at("expiry"), "");
    expect_holds(row.at("legs"), " t=0.25 @");
  }
}

}  // namespace
}  // namespace duskgrid::end_to_end
