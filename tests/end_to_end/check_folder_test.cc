// A run folder held against its own account: every way of tampering with it is found and named.
#include <gtest/gtest.h>

#include <nlohmann/json.hpp>

#include "end_to_end/program.h"
#include "publish/digest.h"

namespace duskgrid::end_to_end {
namespace {

const fs::path kNight = fs::path(DUSKGRID_SOURCE_DIR) / "data/demo_night";

class CheckFolder : public testing::Test {
 protected:
  static void SetUpTestSuite() {
    published_ = new Scratch;
    duskgrid({"build", (kNight / "night.toml").string(), "--out", (*published_ / "out").string(),
              "--quiet"});
  }
  static void TearDownTestSuite() { delete published_; }
  void SetUp() override { fs::copy(source(), folder(), fs::copy_options::recursive); }

  static fs::path source() { return *published_ / "out/2031-03-14"; }
  fs::path folder() const { return scratch_ / "run"; }
  Ran check() const { return duskgrid({"check", folder().string()}); }
  nlohmann::ordered_json account() const {
    return nlohmann::ordered_json::parse(slurp(folder() / "run.json"));
  }
  void store(const nlohmann::ordered_json& run) const {
    spill(folder() / "run.json", run.dump(1) + "\n");
  }
  // Replaces the first `from` in a file; with `sign`, run.json gets the new sum, so that only what
  // the file says can tell.
  void change(const std::string& file, const std::string& from, const std::string& to,
              bool sign = true) const {
    std::string text = slurp(folder() / file);
    const auto at = text.find(from);
    ASSERT_NE(at, std::string::npos) << from;
    spill(folder() / file, text.replace(at, from.size(), to));
    if (sign) resign(file);
  }
  void resign(const std::string& file) const {
    auto run = account();
    for (auto& output : run["outputs"])
      if (output["file"] == file)
        output["sha256"] = publish::digest_file((folder() / file).string())->sha256;
    store(run);
  }
  void expect_finding(const std::string& piece) const {
    const auto ran = check();
    EXPECT_EQ(ran.status, 3) << ran.out << ran.err;
    const auto at = ran.out.find("finding: ");
    ASSERT_NE(at, std::string::npos) << ran.out;
    EXPECT_NE(ran.out.find(piece, at), std::string::npos) << ran.out;
    EXPECT_NE(ran.out.find("not sound"), std::string::npos);
  }

  static Scratch* published_;
  Scratch scratch_;
};
Scratch* CheckFolder::published_ = nullptr;

TEST_F(CheckFolder, PublishedFolderIsSound) {
  const auto ran = check();
  EXPECT_EQ(ran.status, 0) << ran.out << ran.err;
  EXPECT_NE(ran.out.find(publish::digest_file((folder() / "run.json").string())->sha256),
            std::string::npos)
      << "the sum to approve";
  EXPECT_EQ(ran.out.find("finding"), std::string::npos);
  EXPECT_EQ(ran.out.find("note"), std::string::npos);
}

TEST_F(CheckFolder, LinkToTheFolderIsChecked) {
  EXPECT_EQ(duskgrid({"check", (*published_ / "out/latest").string()}).status, 0);
}

TEST_F(CheckFolder, ChangedByteIsFoundBySum) {
  for (const std::string file :
       {"forwards.csv", "grid.csv", "ledger.csv", "violations.csv", "surfaces/QNOR.json"}) {
    fs::remove_all(folder());
    SetUp();
    spill(folder() / file, slurp(folder() / file) + "\n");
    expect_finding(file + ": has another SHA-256");
  }
}

TEST_F(CheckFolder, MissingAndForeignFilesAreFound) {
  fs::remove(folder() / "forwards.csv");
  expect_finding("forwards.csv: is missing");
  spill(folder() / "surfaces/extra.txt", "x");
  expect_finding("surfaces/extra.txt: is not in run.json");
  fs::remove(folder() / "timings.json");
  expect_finding("timings.json: is missing");
  fs::remove(folder() / "ledger.csv");
  fs::create_symlink(source() / "ledger.csv", folder() / "ledger.csv");
  expect_finding("ledger.csv: is neither a file nor a folder");
  expect_finding("ledger.csv: is missing");
}

TEST_F(CheckFolder, VolatilityThatTheSurfaceDoesNotGiveIsFoundThoughSigned) {
  const auto row = read_table(folder() / "grid.csv").at(5);
  const std::string vol = row.at("vol");
  // A thousandth of a volatility point: 1e-5.
  change("grid.csv", "," + row.at("strike") + "," + vol + ",",
         "," + row.at("strike") + "," + std::to_string(std::stod(vol) + 1e-5) + ",");
  expect_finding("grid.csv: line 7: strike");
}

TEST_F(CheckFolder, StrikeForwardExpiryAndAxisThatAreNotTheSurfacesAreFound) {
  const auto row = read_table(folder() / "grid.csv").at(5);
  const std::pair<std::string, std::string> kChanges[] = {
      {"," + row.at("strike") + ",", ",101.5,"},
      {"," + row.at("forward") + ",", ",101.5,"},
      {"," + row.at("expiry") + ",", ",2031-05-05T16:00:00-04:00,"},
      {",moneyness,", ",delta,"},
      {",moneyness,", ",sideways,"},
      {row.at("as_of") + ",", "2031-03-13T16:00:00-05:00,"}};
  for (const auto& [from, to] : kChanges) {
    SCOPED_TRACE(to);
    fs::remove_all(folder());
    SetUp();
    change("grid.csv", from, to);
    expect_finding("grid.csv: line ");
  }
}

TEST_F(CheckFolder, ExpiryLeftOutOfTheGridIsFound) {
  const auto rows = read_table(folder() / "grid.csv");
  const auto name = rows.at(0).at("underlying"), expiry = rows.at(0).at("expiry");
  std::string kept;
  std::ifstream grid(folder() / "grid.csv");
  for (std::string line; std::getline(grid, line);)
    if (line.find("," + name + "," + expiry + ",,") == std::string::npos) kept += line + "\n";
  grid.close();
  spill(folder() / "grid.csv", kept);
  resign("grid.csv");
  expect_finding("expiries of " + name);
}

TEST_F(CheckFolder, LineTakenFromTheLedgerIsFound) {
  const std::string text = slurp(folder() / "ledger.csv");
  spill(folder() / "ledger.csv", text.substr(0, text.rfind('\n', text.size() - 2) + 1));
  resign("ledger.csv");
  expect_finding("ledger.csv: 3946 contracts, run.json says 3947");
}

TEST_F(CheckFolder, StateChangedInTheLedgerIsFound) {
  change("ledger.csv", ",used,,", ",dropped,outlier,");
  expect_finding("ledger.csv: 1599 used, run.json says 1600");
}

TEST_F(CheckFolder, ReasonsThatDoNotAddUpAreFound) {
  auto run = account();
  run["reasons"]["no-bid"] = run["reasons"]["no-bid"].get<int>() + 1;
  store(run);
  expect_finding("run.json: its rows and reasons do not add up");
}

TEST_F(CheckFolder, SurfaceThatIsNotProvedIsFoundThoughSaidToBeCertified) {
  auto surface = nlohmann::ordered_json::parse(slurp(folder() / "surfaces/QNOR.json"));
  surface["slices"][0]["theta"] = 100 * surface["slices"][0]["theta"].get<double>();
  spill(folder() / "surfaces/QNOR.json", surface.dump(1));
  resign("surfaces/QNOR.json");
  expect_finding("surfaces/QNOR.json: is not proved free of arbitrage");
}

TEST_F(CheckFolder, SurfaceOfAnotherNameOrUnreadableIsFound) {
  fs::copy_file(folder() / "surfaces/BRAKSH.json", folder() / "surfaces/QNOR.json",
                fs::copy_options::overwrite_existing);
  resign("surfaces/QNOR.json");
  expect_finding("surfaces/QNOR.json: is the surface of BRAKSH");
  spill(folder() / "surfaces/QNOR.json", "{}");
  resign("surfaces/QNOR.json");
  expect_finding("surfaces/QNOR.json: is not a stored surface");
}

TEST_F(CheckFolder, InputThatIsGoneOrChangedIsANoteAndNoFinding) {
  auto run = account();
  run["inputs"][0]["file"] = (scratch_ / "gone.csv").string();
  run["inputs"][1]["sha256"] = std::string(64, '0');
  store(run);
  const auto ran = check();
  EXPECT_EQ(ran.status, 0) << ran.out;
  EXPECT_NE(ran.out.find("gone.csv is no longer there"), std::string::npos) << ran.out;
  EXPECT_NE(ran.out.find("is not what was read"), std::string::npos) << ran.out;
}

TEST_F(CheckFolder, PathOutOfTheFolderIsNotFollowed) {
  auto run = account();
  run["outputs"].push_back({{"file", "../run/grid.csv"}, {"sha256", std::string(64, '0')}});
  store(run);
  expect_finding("../run/grid.csv: is missing");
}

TEST_F(CheckFolder, AccountThatIsNoneHasStatus65AndAFolderWithoutOne66) {
  for (const char* text : {"", "[]", "{}", "nothing", "{\"tool\": \"duskgrid\"}",
                           "{\"tool\": \"duskgrid\", \"version\": 7}"}) {
    spill(folder() / "run.json", text);
    const auto ran = check();
    EXPECT_EQ(ran.status, 65) << text << ran.out << ran.err;
    EXPECT_EQ(ran.out, "");
  }
  fs::remove(folder() / "run.json");
  EXPECT_EQ(check().status, 66);
  EXPECT_EQ(duskgrid({"check", (*published_ / "out").string()}).status, 66);
}

TEST_F(CheckFolder, TypesThatRunJsonNeverHasAreStatus65) {
  for (const std::string path : {"/rows/read", "/underlyings/QNOR/status", "/inputs/0/bytes",
                                 "/outputs/0/file", "/as_of", "/reasons/no-bid"}) {
    for (const auto& value : {nlohmann::ordered_json(1.5), nlohmann::ordered_json("word"),
                              nlohmann::ordered_json(nullptr), nlohmann::ordered_json::array()}) {
      auto run = nlohmann::ordered_json::parse(slurp(source() / "run.json"));
      run[nlohmann::ordered_json::json_pointer(path)] = value;
      store(run);
      const auto status = check().status;
      // A word is a file name all right, and then it is one that is not there.
      EXPECT_EQ(status, path == "/outputs/0/file" && value.is_string() ? 3 : 65) << path << value;
    }
  }
}

}  // namespace
}  // namespace duskgrid::end_to_end
