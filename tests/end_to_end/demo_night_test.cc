// The invented night in data/, as a user would run it.
#include <gtest/gtest.h>

#include <nlohmann/json.hpp>
#include <set>

#include "end_to_end/program.h"
#include "publish/digest.h"
#include "publish/text.h"

namespace duskgrid::end_to_end {
namespace {

const fs::path kNight = fs::path(DUSKGRID_SOURCE_DIR) / "data/demo_night";

class DemoNight : public testing::Test {
 protected:
  static void SetUpTestSuite() {
    scratch_ = new Scratch;
    ran_ = new Ran(duskgrid({"build", (kNight / "night.toml").string(), "--out",
                             (*scratch_ / "out").string(), "--threads", "1"}));
  }
  static void TearDownTestSuite() {
    delete scratch_;
    delete ran_;
  }
  static fs::path folder() { return *scratch_ / "out" / "2031-03-14"; }
  static nlohmann::json account() { return nlohmann::json::parse(slurp(folder() / "run.json")); }

  static Scratch* scratch_;
  static Ran* ran_;
};
Scratch* DemoNight::scratch_ = nullptr;
Ran* DemoNight::ran_ = nullptr;

TEST_F(DemoNight, OneNameThatCannotBeMarkedGivesStatusFourAndTheOthersArePublished) {
  EXPECT_EQ(ran_->status, 4) << ran_->err;
  EXPECT_EQ(ran_->out, folder().string() + "\n");
  const auto underlyings = account().at("underlyings");
  EXPECT_EQ(underlyings.at("FOGHRN").at("status"), "refused");
  int published = 0;
  for (const auto& u : underlyings) published += u.at("status") != "refused";
  EXPECT_EQ(published, 11);
}

TEST_F(DemoNight, EveryPlantedFaultEndsWhereItWasMeantTo) {
  std::map<std::pair<std::string, std::string>, std::set<std::string>> reasons;
  for (const auto& row : read_table(folder() / "ledger.csv"))
    reasons[{fs::path(row.at("file")).filename(), row.at("line")}].insert(row.at("reason"));
  std::set<std::string> broken;  // underlying, date and strike of every leg's slice
  for (const auto& row : read_table(folder() / "violations.csv"))
    for (const char* strike : {"strike_1", "strike_2", "strike_3"})
      if (!row.at(strike).empty())
        broken.insert(row.at("underlying") + row.at("expiry").substr(0, 10) +
                      std::to_string(std::stod(row.at(strike))));
  const auto planted = read_table(kNight / "planted.tsv", '\t');
  ASSERT_GT(planted.size(), 50u);
  for (const auto& fault : planted) {
    const std::string where = fault.at("file") + " line " + fault.at("line");
    const bool found =
        fault.at("expected") == "violation"
            ? broken.count(fault.at("underlying") + fault.at("expiry") +
                           std::to_string(std::stod(fault.at("strike")))) > 0
            : reasons[{fault.at("file"), fault.at("line")}].count(fault.at("expected")) > 0;
    EXPECT_TRUE(found) << where << " is not " << fault.at("expected");
  }
}

TEST_F(DemoNight, EveryContractReadIsInTheLedgerOnce) {
  const auto run = account();
  std::map<std::string, std::int64_t> states, words;
  for (const auto& row : read_table(folder() / "ledger.csv")) {
    ++states[row.at("state")];
    if (!row.at("reason").empty()) ++words[row.at("reason")];
  }
  const auto& rows = run.at("rows");
  std::int64_t total = 0;
  for (const char* state : {"used", "spare", "dropped"}) {
    EXPECT_EQ(states[state], rows.at(state).get<std::int64_t>());
    total += states[state];
  }
  EXPECT_EQ(total, rows.at("read").get<std::int64_t>());
  for (const auto& [word, count] : run.at("reasons").items())
    EXPECT_EQ(words[word], count.get<std::int64_t>()) << word;
}

TEST_F(DemoNight, TheManifestNamesEveryFileWithItsSum) {
  std::set<std::string> listed;
  const auto run = account();
  for (const auto& output : run.at("outputs")) {
    const std::string file = output.at("file");
    listed.insert(file);
    EXPECT_EQ(publish::digest_file((folder() / file).string())->sha256, output.at("sha256"));
  }
  for (const auto& entry : fs::recursive_directory_iterator(folder())) {
    const auto name = fs::relative(entry.path(), folder()).string();
    if (entry.is_regular_file() && name != "run.json" && name != "timings.json") {
      EXPECT_TRUE(listed.count(name)) << name;
    }
  }
  for (const auto& input : run.at("inputs"))
    EXPECT_EQ(publish::digest_file(input.at("file"))->sha256, input.at("sha256"));
}

TEST_F(DemoNight, TwoThreadsGiveTheSameBytes) {
  const Scratch other;
  duskgrid({"build", (kNight / "night.toml").string(), "--out", (other / "out").string(),
            "--threads", "2"});
  for (const auto& entry : fs::recursive_directory_iterator(folder())) {
    const auto name = fs::relative(entry.path(), folder());
    if (entry.is_regular_file() && name != "timings.json") {
      EXPECT_EQ(slurp(entry.path()), slurp(other / "out" / "2031-03-14" / name)) << name;
    }
  }
}

TEST_F(DemoNight, TheGridHasEveryUnderlyingAtTheForwardAndNoCellThatIsNotANumber) {
  std::set<std::string> at_the_forward;
  const auto rows = read_table(folder() / "grid.csv");
  for (const auto& row : rows) {
    const double vol = std::stod(row.at("vol"));
    EXPECT_GT(vol, 0);
    EXPECT_LT(vol, 5);
    if (row.at("strike") == row.at("forward"))
      at_the_forward.insert(row.at("underlying") + row.at("expiry"));
    for (const auto& [column, cell] : row) {
      EXPECT_EQ(cell.find("nan"), std::string::npos) << column;
      EXPECT_EQ(cell.find("inf"), std::string::npos) << column;
    }
  }
  std::set<std::string> times;
  for (const auto& row : rows) times.insert(row.at("underlying") + row.at("expiry"));
  EXPECT_EQ(at_the_forward, times);
}

TEST_F(DemoNight, ItsOwnGridAndSurfacesPassTheCheck) {
  // Volatilities are printed to round trip: what remains is the rounding of prices.
  EXPECT_EQ(duskgrid({"check", (folder() / "grid.csv").string()}).status, 0);
  std::vector<std::string> arguments{"check"};
  for (const auto& entry : fs::directory_iterator(folder() / "surfaces"))
    arguments.push_back(entry.path().string());
  EXPECT_EQ(arguments.size(), 12u);
  EXPECT_EQ(duskgrid(arguments).status, 0);
}

TEST_F(DemoNight, RemadeFromItsSeedItIsTheSame) {
  const Scratch remade;
  ASSERT_EQ(run(DUSKGRID_MAKE_NIGHT, {"--out", (remade / "night").string()}).status, 0);
  std::size_t files = 0;
  for (const auto& entry : fs::directory_iterator(kNight)) {
    const auto name = entry.path().filename();
    ++files;
    // Another version of a compressor may pack the same text into other bytes.
    const bool packed = name.extension() == ".gz" || name.extension() == ".zst";
    EXPECT_TRUE(fs::exists(remade / "night" / name)) << name;
    if (!packed) {
      EXPECT_EQ(slurp(entry.path()), slurp(remade / "night" / name)) << name;
    }
  }
  EXPECT_GE(files, 8u);
}

TEST_F(DemoNight, TheLinesShownInTheReadmeAreThoseOfTheNight) {
  const std::string grid = slurp(folder() / "grid.csv"), ledger = slurp(folder() / "ledger.csv");
  std::ifstream readme(fs::path(DUSKGRID_SOURCE_DIR) / "README.md");
  int shown = 0;
  for (std::string line; std::getline(readme, line);) {
    if (line.rfind("2031-03-14T16:00:00-05:00,", 0) == 0) {
      EXPECT_NE(grid.find(line + "\n"), std::string::npos) << line;
      ++shown;
    }
    // The file is named as it was on the command line: the rest of the line is compared.
    if (line.rfind("data/demo_night/", 0) == 0) {
      EXPECT_NE(ledger.find(line.substr(line.find(',')) + "\n"), std::string::npos) << line;
      ++shown;
    }
  }
  EXPECT_EQ(shown, 4);
}

TEST_F(DemoNight, MissIsZeroJustInsideTheSpread) {
  for (const auto& row : read_table(folder() / "ledger.csv")) {
    if (row.at("state") != "used") continue;
    const double bid = std::stod(row.at("vol_bid")), ask = std::stod(row.at("vol_ask"));
    EXPECT_LE(bid, ask);
    const double fit = std::stod(row.at("vol_fit")), miss = std::stod(row.at("miss"));
    EXPECT_EQ(miss == 0, bid <= fit && fit <= ask);
    EXPECT_EQ(miss > 0, fit > ask);
    EXPECT_EQ(miss < 0, fit < bid);
  }
}

}  // namespace
}  // namespace duskgrid::end_to_end
