// An invented universe with its truth, end to end: what is published is near the truth, proved free
// of arbitrage, and the same bytes for any number of threads and any order of rows.
// DUSKGRID_UNIVERSE names a folder made by make_night --underlyings to be taken instead of a small
// one.
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <cstdlib>
#include <iostream>
#include <nlohmann/json.hpp>
#include <random>
#include <set>

#include "end_to_end/program.h"

namespace duskgrid::end_to_end {
namespace {

// Errors are compared with what the market leaves open: half the distance between bid and ask, in
// volatility. A mid lies up to 0.4 half-spreads from the truth in these quotes (make_night), a
// quarter of it half the time, and a fit averages over neighbours.
constexpr double kMedianError = 0.25;

class Universe : public testing::Test {
 protected:
  static void SetUpTestSuite() {
    scratch_ = new Scratch;
    const char* given = std::getenv("DUSKGRID_UNIVERSE");
    night_ = given != nullptr ? fs::path(given) : *scratch_ / "night";
    if (given == nullptr)
      run(DUSKGRID_MAKE_NIGHT,
          {"--underlyings", "60", "--quotes", "8000", "--seed", "11", "--out", night_.string()});
    ran_ = new Ran(build(night_, "out", "2"));
  }
  static void TearDownTestSuite() {
    delete scratch_;
    delete ran_;
  }

  static Ran build(const fs::path& night, const std::string& out, const std::string& threads) {
    return duskgrid({"build", (night / "night.toml").string(), "--out", (*scratch_ / out).string(),
                     "--threads", threads, "--quiet"});
  }
  static fs::path folder(const std::string& out = "out") { return *scratch_ / out / "2031-03-14"; }
  static nlohmann::json account() { return nlohmann::json::parse(slurp(folder() / "run.json")); }

  // Every file of both runs but those named; a folder is named with its slash.
  static void expect_same(const std::string& other, const std::set<std::string>& but) {
    std::size_t files = 0;
    for (const auto& entry : fs::recursive_directory_iterator(folder())) {
      const auto name = fs::relative(entry.path(), folder());
      if (!entry.is_regular_file() || but.count(name.string()) > 0) continue;
      if (but.count(name.parent_path().string() + "/") > 0) continue;
      EXPECT_TRUE(slurp(entry.path()) == slurp(folder(other) / name)) << name << " differs";
      ++files;
    }
    EXPECT_GT(files, account().at("underlyings").size() / 2);
  }

  static Scratch* scratch_;
  static fs::path night_;
  static Ran* ran_;
};
Scratch* Universe::scratch_ = nullptr;
fs::path Universe::night_;
Ran* Universe::ran_ = nullptr;

double median(std::vector<double> values) {
  const auto middle = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
  std::nth_element(values.begin(), middle, values.end());
  return *middle;
}

struct Truth {
  std::string kind;
  double vol;
};

std::map<std::string, Truth> read_truth(const fs::path& path) {
  std::map<std::string, Truth> truth;
  std::ifstream file(path);
  std::string line;
  std::getline(file, line);
  while (std::getline(file, line)) {
    const auto cells = split(line, ',');
    truth[cells[0] + ' ' + cells[2] + ' ' + std::to_string(std::stod(cells[3]))] = {
        cells[1], std::stod(cells[4])};
  }
  return truth;
}

// Errors of used quotes in half-spreads of vol, by kind of name.
std::map<std::string, std::vector<double>> errors_by_kind(const fs::path& truth_path,
                                                          const fs::path& ledger) {
  const auto truth = read_truth(truth_path);
  std::map<std::string, std::vector<double>> errors;
  std::ifstream file(ledger);
  std::string line;
  std::getline(file, line);
  const auto headers = split(line, ',');
  const auto at = [&](const char* name) {
    return std::find(headers.begin(), headers.end(), name) - headers.begin();
  };
  const auto name = at("underlying"), expiry = at("expiry"), strike = at("strike"),
             state = at("state"), bid = at("vol_bid"), ask = at("vol_ask"), fit = at("vol_fit");
  while (std::getline(file, line)) {
    const auto cells = split(line, ',');
    if (cells[state] != "used") continue;
    const auto known = truth.find(cells[name] + ' ' + cells[expiry].substr(0, 10) + ' ' +
                                  std::to_string(std::stod(cells[strike])));
    if (known == truth.end()) {
      ADD_FAILURE() << "no truth for " << line;
      return errors;
    }
    const double half = 0.5 * (std::stod(cells[ask]) - std::stod(cells[bid]));
    errors[known->second.kind].push_back(std::abs(std::stod(cells[fit]) - known->second.vol) /
                                         half);
  }
  return errors;
}

TEST_F(Universe, MedianErrorOfEveryKindOfNameIsWithinAQuarterOfTheHalfSpread) {
  const auto errors = errors_by_kind(night_ / "truth.csv", folder() / "ledger.csv");
  const std::set<std::string> kinds{"index", "large",          "medium", "small",
                                    "payer", "hard-to-borrow", "event"};
  for (const auto& kind : kinds) {
    ASSERT_TRUE(errors.count(kind)) << kind;
    const double error = median(errors.at(kind));
    std::cout << kind << ": " << errors.at(kind).size() << " used quotes, median error " << error
              << " half-spreads\n";
    EXPECT_LT(error, kMedianError) << kind;
  }
  EXPECT_FALSE(errors.count("dead"));
}

TEST_F(Universe, EverySurfaceIsCertifiedAndOnlyDeadNamesHaveNone) {
  std::set<std::string> dead;
  for (const auto& row : read_table(night_ / "truth.csv"))
    if (row.at("kind") == "dead") dead.insert(row.at("underlying"));
  const auto run = account();
  for (const auto& [name, record] : run.at("underlyings").items()) {
    EXPECT_EQ(record.at("status") == "refused", dead.count(name) > 0) << name;
    EXPECT_EQ(record.at("certified").get<bool>(), dead.count(name) == 0) << name;
  }
  EXPECT_FALSE(dead.empty());
}

TEST_F(Universe, AnyNumberOfThreadsGivesTheSameBytes) {
  for (const char* threads : {"1", "8"}) {
    build(night_, threads, threads);
    expect_same(threads, {"timings.json"});
  }
}

// The ledger is by line, and run.json has the sums of both.
TEST_F(Universe, ShuffledRowsGiveTheSameBytesWhereNoLineIsNamed) {
  const fs::path shuffled = *scratch_ / "shuffled-night";
  std::ifstream file(night_ / "quotes.csv");
  std::string line, text;
  std::getline(file, line);
  text = line + '\n';
  std::vector<std::string> rows;
  while (std::getline(file, line)) rows.push_back(line);
  std::shuffle(rows.begin(), rows.end(), std::mt19937_64(5));
  for (const auto& row : rows) text += row + '\n';
  spill(shuffled / "quotes.csv", text);
  spill(shuffled / "night.toml", slurp(night_ / "night.toml"));
  build(shuffled, "shuffled", "2");
  // The ledger, and the pages that tell of it, name lines of the file.
  expect_same("shuffled", {"timings.json", "run.json", "ledger.csv", "report/"});
}

}  // namespace
}  // namespace duskgrid::end_to_end
