// Two invented nights in a row, the second with changes planted, as a user would run them.
#include <gtest/gtest.h>

#include <cmath>
#include <nlohmann/json.hpp>
#include <set>

#include "end_to_end/program.h"

namespace duskgrid::end_to_end {
namespace {

class TwoNights : public testing::Test {
 protected:
  static void SetUpTestSuite() {
    scratch_ = new Scratch;
    for (const bool next : {false, true}) {
      std::vector<std::string> arguments{"--out", night(next)};
      if (next) arguments.emplace_back("--next-night");
      ASSERT_EQ(run(DUSKGRID_MAKE_NIGHT, arguments).status, 0);
      built_ = duskgrid({"build", night(next) + "/night.toml", "--out", out(), "--threads", "1"});
    }
  }
  static void TearDownTestSuite() { delete scratch_; }

  static std::string night(bool next) { return (*scratch_ / (next ? "next" : "first")).string(); }
  static std::string out() { return (*scratch_ / "out").string(); }
  static fs::path first() { return *scratch_ / "out" / "2031-03-14"; }
  static fs::path next() { return *scratch_ / "out" / "2031-03-17"; }
  static nlohmann::json account() { return nlohmann::json::parse(slurp(next() / "run.json")); }

  // A table that went to standard output.
  static std::vector<Row> table(const Ran& ran) {
    const Scratch scratch;
    spill(scratch / "table.csv", ran.out);
    return read_table(scratch / "table.csv");
  }
  static void expect_planted(const std::vector<Row>& changes) {
    const auto planted = read_table(fs::path(night(true)) / "changes.tsv", '\t');
    ASSERT_EQ(planted.size(), 5u);
    for (const auto& plant : planted) {
      bool found = false;
      for (const auto& row : changes)
        found = found || (row.at("underlying") == plant.at("underlying") &&
                          row.at("state") == plant.at("expected") &&
                          row.at("expiry").rfind(plant.at("expiry"), 0) == 0);
      EXPECT_TRUE(found) << plant.at("kind");
    }
  }

  static Scratch* scratch_;
  static Ran built_;
};
Scratch* TwoNights::scratch_ = nullptr;
Ran TwoNights::built_;

TEST_F(TwoNights, SecondIsPublishedAndSaysWithWhichItWasCompared) {
  // One name is refused on either night.
  EXPECT_EQ(built_.status, 4) << built_.err;
  EXPECT_EQ(built_.out, next().string() + "\n");
  EXPECT_EQ(account().at("previous").at("folder"), "2031-03-14");
}

TEST_F(TwoNights, EveryPlantedChangeIsInTheFolder) {
  expect_planted(read_table(next() / "changes.csv"));
}

TEST_F(TwoNights, CompareSaysTheSameAsTheFolder) {
  const auto ran = duskgrid({"compare", first().string(), next().string()});
  EXPECT_EQ(ran.status, 3) << ran.err;
  EXPECT_EQ(ran.out, slurp(next() / "changes.csv"));
  expect_planted(table(ran));
  for (std::size_t at = 0; at < ran.err.size();) {
    const auto end = ran.err.find('\n', at);
    EXPECT_LE(end - at, 80u) << ran.err.substr(at, end - at);
    at = end + 1;
  }
}

TEST_F(TwoNights, LevelShiftIsLevelSkewIsSkewAndBothAreToBeSignedOff) {
  std::set<std::string> to_sign;
  for (const auto& row : read_table(next() / "changes.csv")) {
    if (!row.at("sign_off").empty()) to_sign.insert(row.at("underlying"));
    if (row.at("change").empty() || row.at("tenor") != "") continue;
    const auto number = [&](const char* column) { return std::stod(row.at(column)); };
    // Parts add up to rounding, numbers being printed whole.
    constexpr double kRounding = 1e-13;
    const double own = number("level") + number("skew") + number("curvature") + number("rest");
    EXPECT_NEAR(own, number("move"), kRounding);
    EXPECT_NEAR(own + number("roll_down"), number("change"), kRounding);
    EXPECT_NEAR(own + number("roll_down") + number("forward"), number("change_at_strike"),
                kRounding);
    if (row.at("underlying") == "KELPWK" && row.at("point") == "1") {
      // 4.5 points were planted; quotes are as wide as half a point.
      EXPECT_NEAR(number("level"), 0.045, 0.005);
      EXPECT_EQ(row.at("sign_off"), "tolerance");
    }
    if (row.at("underlying") == "LANTRN" && row.at("point") == "0.9") {
      EXPECT_GT(number("skew"), 3 * std::abs(number("level")));
      EXPECT_GT(number("skew"), 0);
    }
  }
  EXPECT_TRUE(to_sign.count("KELPWK"));
  EXPECT_FALSE(to_sign.count("HALYRD"));
  EXPECT_FALSE(to_sign.count("TRWLR")) << "carried: nothing of its own moved";
}

TEST_F(TwoNights, ExpiredContractsAreNoNews) {
  for (const auto& row : read_table(next() / "changes.csv"))
    if (row.at("state") == "vanished-expiry") {
      EXPECT_EQ(row.at("underlying"), "BRAKSH");
    }
}

TEST_F(TwoNights, GoneNameIsCarriedEverywhereAndItsSurfaceIsProved) {
  const auto record = account().at("underlyings").at("TRWLR");
  EXPECT_EQ(record.at("status"), "carried");
  EXPECT_EQ(record.at("carried_from"), "2031-03-14T16:00:00-05:00");
  EXPECT_EQ(record.at("certified"), true);
  int nodes = 0, forwards = 0;
  for (const auto& row : read_table(next() / "grid.csv"))
    if (row.at("underlying") == "TRWLR") {
      EXPECT_EQ(row.at("support"), "carried");
      ++nodes;
    }
  for (const auto& row : read_table(next() / "forwards.csv"))
    if (row.at("underlying") == "TRWLR") {
      EXPECT_EQ(row.at("source"), "carried");
      ++forwards;
    }
  EXPECT_GT(nodes, 0);
  EXPECT_EQ(forwards, 4);
  EXPECT_EQ(duskgrid({"check", (next() / "surfaces/TRWLR.json").string()}).status, 0);
}

TEST_F(TwoNights, CompareTakesTwoSurfacesToo) {
  const auto path = [](const fs::path& folder, const char* name) {
    return (folder / "surfaces" / (std::string(name) + ".json")).string();
  };
  const auto moved = duskgrid({"compare", path(first(), "KELPWK"), path(next(), "KELPWK")});
  EXPECT_EQ(moved.status, 3) << moved.err;
  EXPECT_FALSE(table(moved).empty());
  const auto quiet =
      duskgrid({"compare", path(first(), "HALYRD"), path(next(), "HALYRD"), "--tolerance", "0.5"});
  EXPECT_EQ(quiet.status, 0) << quiet.err;
}

TEST_F(TwoNights, CompareRefusesWhatItCannotCompare) {
  EXPECT_EQ(duskgrid({"compare", first().string()}).status, 64);
  EXPECT_EQ(duskgrid({"compare", next().string(), first().string()}).status, 64);
  EXPECT_EQ(duskgrid({"compare", first().string(), next().string(), "--tolerance", "-1"}).status,
            64);
  EXPECT_EQ(
      duskgrid({"compare", first().string(), (next() / "surfaces/QNOR.json").string()}).status, 64);
  EXPECT_EQ(duskgrid({"compare", (first() / "surfaces/QNOR.json").string(),
                      (next() / "surfaces/KELPWK.json").string()})
                .status,
            64);
  EXPECT_EQ(duskgrid({"compare", out(), next().string()}).status, 66);
  EXPECT_EQ(
      duskgrid({"compare", (first() / "grid.csv").string(), (next() / "grid.csv").string()}).status,
      65);
  EXPECT_EQ(duskgrid({"compare", (first() / "surfaces/KELPWK.json").string(),
                      (next() / "surfaces/NOBODY.json").string()})
                .status,
            66);
}

TEST_F(TwoNights, HistoryHasALineANightAndExpiry) {
  const auto ran = duskgrid({"history", "KELPWK", "--out", out()});
  EXPECT_EQ(ran.status, 0) << ran.err;
  const auto rows = table(ran);
  ASSERT_EQ(rows.size(), 8u);
  const auto& before = rows[1];
  const auto& now = rows[5];
  EXPECT_EQ(before.at("date"), "2031-03-14");
  EXPECT_EQ(now.at("date"), "2031-03-17");
  EXPECT_EQ(before.at("expiry"), now.at("expiry"));
  EXPECT_NEAR(std::stod(now.at("vol")) - std::stod(before.at("vol")), 0.045, 0.005);
  EXPECT_EQ(duskgrid({"history", "KELPWK", "--out", out(), "--from", "2031-03-15"}).out.size() <
                ran.out.size(),
            true);
}

TEST_F(TwoNights, HistoryAtATenorIsOnTheSurfaces) {
  const auto rows = table(duskgrid({"history", "HALYRD", "--out", out(), "--tenor", "3M,1Y"}));
  ASSERT_EQ(rows.size(), 4u);
  for (const auto& row : rows) {
    const auto folder = row.at("date") == "2031-03-14" ? first() : next();
    const auto value = table(duskgrid({"value", (folder / "surfaces/HALYRD.json").string(),
                                       "--tenor", row.at("tenor"), "--log-moneyness", "0"}));
    ASSERT_EQ(value.size(), 1u);
    // One expiry: outside it both go by the same rule, to the rounding of doubles.
    constexpr double kRounding = 1e-12;
    EXPECT_NEAR(std::stod(row.at("vol")), std::stod(value[0].at("vol")), kRounding);
    EXPECT_EQ(row.at("expiry"), value[0].at("expiry"));
  }
}

TEST_F(TwoNights, HistoryOfARefusedNightHasALineWithoutNumbers) {
  const auto rows = table(duskgrid({"history", "FOGHRN", "--out", out()}));
  ASSERT_EQ(rows.size(), 2u);
  for (const auto& row : rows) {
    EXPECT_EQ(row.at("status"), "refused");
    EXPECT_EQ(row.at("vol"), "");
  }
}

TEST_F(TwoNights, HistoryStatusesAreThoseOfTheManual) {
  const auto status = [](std::vector<std::string> more) {
    more.insert(more.begin(), {"history", "KELPWK", "--out", out()});
    return duskgrid(more).status;
  };
  EXPECT_EQ(status({"--from", "2032-01-01"}), 4);
  EXPECT_EQ(duskgrid({"history", "NOBODY", "--out", out()}).status, 4);
  EXPECT_EQ(status({"--from", "yesterday"}), 64);
  EXPECT_EQ(status({"--from", "2031-03-17", "--to", "2031-03-14"}), 64);
  EXPECT_EQ(status({"--tenor", "soon"}), 64);
  EXPECT_EQ(duskgrid({"history"}).status, 64);
  EXPECT_EQ(duskgrid({"history", "KELPWK", "--out", out() + "/nowhere"}).status, 66);
  const Scratch other;
  spill(other / "history.sqlite", std::string(5000, 'x'));
  EXPECT_EQ(duskgrid({"history", "KELPWK", "--out", (other / ".").string()}).status, 66);
}

}  // namespace
}  // namespace duskgrid::end_to_end
