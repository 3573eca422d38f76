#include "night/run.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <map>
#include <nlohmann/json.hpp>
#include <random>
#include <sstream>

#include "pricing/black.h"
#include "publish/digest.h"
#include "publish/surface_json.h"
#include "publish/text.h"

namespace duskgrid::night {
namespace {

namespace fs = std::filesystem;
using nlohmann::json;
using Files = std::map<std::string, std::string>;

constexpr const char* kHeader = "underlying,expiry,strike,put_call,bid,ask,underlying_price\n";

std::string content_of(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

// What a page of the report is made from.
json data_of(const std::string& path) {
  const std::string page = content_of(path);
  const std::string open = "<script type=\"application/json\" id=\"data\">";
  const auto begin = page.find(open) + open.size();
  return json::parse(page.substr(begin, page.find("</script>", begin) - begin));
}

std::vector<std::string> cells_of(const std::string& line) {
  std::vector<std::string> cells;
  std::istringstream in(line);
  for (std::string cell; std::getline(in, cell, ',');) cells.push_back(cell);
  return cells;
}

// Every file of a run but the one that may differ between equal runs.
Files files_of(const std::string& folder) {
  Files files;
  for (const auto& entry : fs::recursive_directory_iterator(folder))
    if (entry.is_regular_file() && entry.path().filename() != "timings.json")
      files[fs::relative(entry.path(), folder)] = content_of(entry.path());
  return files;
}

// Rows of one underlying on 2031-03-14: two expiries of a smile, prices to the cent.
std::vector<std::string> rows_of(const std::string& name, double spot) {
  std::vector<std::string> rows;
  const std::pair<const char*, double> kExpiries[] = {{"2031-06-20", 98 / 365.0},
                                                      {"2031-12-19", 280 / 365.0}};
  for (const auto& [expiry, t] : kExpiries)
    for (int i = -6; i <= 6; ++i) {
      const double strike = std::round(spot * (1 + 0.05 * i)), k = std::log(strike / spot);
      const double vol = 0.2 - 0.1 * k + 0.2 * k * k;
      for (const auto side : {quotes::PutCall::call, quotes::PutCall::put}) {
        const double price = pricing::black_price({side, spot, strike, 1}, vol * std::sqrt(t));
        const auto cents = std::llround(100 * price);
        char row[200];
        std::snprintf(row, sizeof row, "%s,%s,%g,%c,%.2f,%.2f,%g\n", name.c_str(), expiry, strike,
                      side == quotes::PutCall::call ? 'C' : 'P',
                      std::max(0.0, 0.01 * static_cast<double>(cents - 2)),
                      0.01 * static_cast<double>(cents + 2), spot);
        rows.emplace_back(row);
      }
    }
  return rows;
}

std::string joined(const std::vector<std::string>& rows) {
  std::string text = kHeader;
  for (const auto& row : rows) text += row;
  return text;
}

class RunNightTest : public testing::Test {
 protected:
  void SetUp() override {
    fs::remove_all(folder_);
    fs::create_directories(folder_);
    for (const auto& [name, spot] :
         {std::pair("HALYRD", 100.0), {"KELPWK", 42.0}, {"=NORLUX", 7000.0}})
      for (auto& row : rows_of(name, spot)) rows_.push_back(std::move(row));
  }
  void TearDown() override { fs::remove_all(folder_); }

  void write(const std::string& text) {
    std::ofstream(folder_ + "/quotes.csv", std::ios::binary) << text;
  }
  Result<NightOutcome> attempt(const std::string& out, int threads = 1,
                               const std::string& as_of = "2031-03-14") {
    auto config = parse_config(
        "as_of = '" + as_of + "'\n[grid]\ntenors = ['6M']\n" + "[[source]]\nfiles = 'quotes.csv'\n",
        "night.toml", folder_);
    if (!config) return config.failure();
    return run_night(*config, {folder_ + "/" + out, threads, {}});
  }
  NightOutcome run(const std::string& out, int threads = 1) {
    auto outcome = attempt(out, threads);
    if (outcome) return std::move(*outcome);
    ADD_FAILURE() << outcome.failure().text();
    return {};
  }

  std::string folder_ = testing::TempDir() + "run_test_" +
                        testing::UnitTest::GetInstance()->current_test_info()->name();
  std::vector<std::string> rows_;
};

TEST_F(RunNightTest, FolderOfTheLocalDateHoldsEveryFile) {
  write(joined(rows_));
  const auto outcome = run("out");
  EXPECT_EQ(outcome.folder, folder_ + "/out/2031-03-14");
  for (const char* file : {"grid.csv", "ledger.csv", "forwards.csv", "violations.csv", "run.json",
                           "timings.json", "surfaces/HALYRD.json", "surfaces/%3DNORLUX.json"})
    EXPECT_TRUE(fs::is_regular_file(outcome.folder + "/" + file)) << file;
  EXPECT_EQ(outcome.underlyings.size(), 3U);
}

TEST_F(RunNightTest, ReportHasThePagesThatItsScopeAsksFor) {
  rows_.push_back("SANDPR,2031-06-20,100,C,0,1,100\n");  // nothing to fit: refused
  write(joined(rows_));
  const auto pages = [&](const std::string& scope) {
    const auto config = parse_config(
        "as_of = '2031-03-14'\nreport = '" + scope + "'\n[[source]]\nfiles = 'quotes.csv'\n",
        "night.toml", folder_);
    const auto outcome = run_night(*config, {folder_ + "/" + scope, 2, {}});
    std::vector<std::string> names;
    if (outcome && fs::exists(outcome->folder + "/report"))
      for (const auto& entry : fs::directory_iterator(outcome->folder + "/report"))
        names.push_back(entry.path().filename());
    std::sort(names.begin(), names.end());
    return names;
  };
  using Names = std::vector<std::string>;
  const Names all{"%3DNORLUX.html", "HALYRD.html", "KELPWK.html", "SANDPR.html",
                  "duskgrid.css",   "duskgrid.js", "index.html"};
  EXPECT_EQ(pages("all"), all);
  EXPECT_EQ(pages("automatic"), all);
  EXPECT_EQ(pages("flagged"), (Names{"SANDPR.html", "duskgrid.css", "duskgrid.js", "index.html"}));
  EXPECT_EQ(pages("none"), Names{});
}

TEST_F(RunNightTest, ReportShowsWhatMovedSinceTheNightBefore) {
  write(joined(rows_));
  ASSERT_TRUE(attempt("out", 1, "2031-03-14").ok());
  const auto second = attempt("out", 2, "2031-03-17");
  ASSERT_TRUE(second.ok());
  const auto page = content_of(second->folder + "/report/HALYRD.html");
  EXPECT_NE(page.find("\"previous\":\"2031-03-14"), std::string::npos);
  EXPECT_NE(page.find("\"changes\":[["), std::string::npos);
}

// With the spot 10 % higher and the same smile around it, volatilities at a strike change by the
// skew while the surface stays.
TEST_F(RunNightTest, ReportsChangeIsTheMoveThatTheSignOffJudges) {
  write(joined(rows_of("HALYRD", 100)));
  ASSERT_TRUE(attempt("out", 1, "2031-03-14").ok());
  write(joined(rows_of("HALYRD", 110)));
  const auto second = attempt("out", 2, "2031-03-17");
  ASSERT_TRUE(second.ok());
  std::istringstream lines(content_of(second->folder + "/changes.csv"));
  double at_strike = 0, nearest = 1;
  const auto row = data_of(second->folder + "/report/index.html").at("underlyings").at(0);
  const double shown = row.at(10);
  for (std::string line; std::getline(lines, line);) {
    const auto cells = cells_of(line);
    if (cells.at(1) != "compared") continue;
    at_strike = std::max(at_strike, std::abs(std::stod(cells.at(11))));
    nearest = std::min(nearest, std::abs(std::stod(cells.at(14)) - shown));
  }
  EXPECT_GT(at_strike, 0.01);
  EXPECT_LT(std::abs(shown), at_strike / 2);
  EXPECT_LT(nearest, 1e-7);  // the page has 7 digits of what changes.csv has in full
}

// An American volatility is not that of a European formula, and the ledger has none of what was
// dropped beforehand; a European one is shown, that it can be seen where the quote lies.
TEST_F(RunNightTest, ReportHasNoVolatilityOfAnAmericanDuplicate) {
  rows_ = rows_of("HALYRD", 100);
  for (auto& row : rows_of("HALYRD", 100)) rows_.push_back(std::move(row));
  write(joined(rows_));
  for (const bool american : {false, true}) {
    const std::string style = american ? "american" : "european";
    const auto config = parse_config(
        "as_of = '2031-03-14'\n[[source]]\nfiles = 'quotes.csv'\nexercise = '" + style + "'\n",
        "night.toml", folder_);
    ASSERT_TRUE(config.ok());
    const auto outcome = run_night(*config, {folder_ + "/" + style, 1, {}});
    ASSERT_TRUE(outcome.ok());
    int duplicates = 0, with_vol = 0;
    const auto page = data_of(outcome->folder + "/report/HALYRD.html");
    for (const auto& expiry : page.at("expiries"))
      for (const auto& quote : expiry.at("quotes")) {
        if (quote.at(2) != static_cast<int>(quotes::Reason::duplicate)) continue;
        ++duplicates;
        with_vol += quote.at(5).is_null() && quote.at(6).is_null() ? 0 : 1;
      }
    EXPECT_EQ(duplicates, 52);
    EXPECT_EQ(with_vol > 0, !american);
  }
}

TEST_F(RunNightTest, ReportNamesRatePointsAndTheDividendsThatAnExpirySees) {
  write(joined(rows_of("HALYRD", 100)));
  const auto config = parse_config(
      "as_of = '2031-03-14'\n[[source]]\nfiles = 'quotes.csv'\n[rates]\n'1Y' = 0.01\n'3M' = "
      "0.01\n[underlying.HALYRD]\ndividends = {'2031-09-01' = 0.5, '2031-05-02' = 0.25, "
      "'2031-03-01' = 9, '2032-03-01' = 9}\n",
      "night.toml", folder_);
  ASSERT_TRUE(config.ok());
  const auto outcome = run_night(*config, {folder_ + "/out", 1, {}});
  ASSERT_TRUE(outcome.ok());
  const json expected{
      {"Rates", "2 points: 3M, 1Y", "given"},
      {"Dividends", "2 dividends: 2031-05-02 0.25 cash, 2031-09-01 0.5 cash", "given"}};
  EXPECT_EQ(data_of(outcome->folder + "/report/HALYRD.html").at("facts"), expected);
}

TEST_F(RunNightTest, OneAndTwoThreadsGiveTheSameBytes) {
  write(joined(rows_));
  const auto one = files_of(run("one", 1).folder), two = files_of(run("two", 2).folder);
  ASSERT_GE(one.size(), 8U);
  for (const auto& [file, text] : one) EXPECT_EQ(text, two.at(file)) << file;
  EXPECT_EQ(one.size(), two.size());
}

TEST_F(RunNightTest, OrderOfRowsChangesNothingButTheLedger) {
  write(joined(rows_));
  const auto sorted = files_of(run("sorted").folder);
  constexpr unsigned kSeed = 20310314;
  std::mt19937 random(kSeed);
  std::shuffle(rows_.begin(), rows_.end(), random);
  write(joined(rows_));
  const auto shuffled = files_of(run("shuffled").folder);
  for (const auto& [file, text] : sorted) {
    // The report names lines too.
    if (file == "ledger.csv" || file == "run.json" || file.starts_with("report/")) continue;
    EXPECT_TRUE(text == shuffled.at(file)) << file << ", seed " << kSeed;
  }
  const auto lines = [](const std::string& text) {
    return std::count(text.begin(), text.end(), '\n');
  };
  EXPECT_EQ(lines(sorted.at("ledger.csv")), lines(shuffled.at("ledger.csv")));
}

TEST_F(RunNightTest, ManifestHashesAreThoseOfEveryFile) {
  write(joined(rows_));
  const auto outcome = run("out");
  const json record = json::parse(content_of(outcome.folder + "/run.json"));
  std::size_t listed = 0;
  for (const auto& output : record["outputs"]) {
    const std::string file = output["file"];
    EXPECT_EQ(publish::digest_file(outcome.folder + "/" + file)->sha256, output["sha256"]) << file;
    ++listed;
  }
  EXPECT_EQ(listed + 1, files_of(outcome.folder).size()) << "all but run.json";
  ASSERT_EQ(record["inputs"].size(), 1U);
  const auto input = publish::digest_file(folder_ + "/quotes.csv");
  EXPECT_EQ(record["inputs"][0]["sha256"], input->sha256);
  EXPECT_EQ(record["inputs"][0]["bytes"], input->bytes);
  EXPECT_EQ(record["inputs"][0]["rows"], rows_.size());
}

TEST_F(RunNightTest, LedgerCountsAddUp) {
  rows_.push_back("HALYRD,someday,100,C,1,2,100\n");
  rows_.push_back("HALYRD,2031-03-13,100,C,1,2,100\n");
  rows_.push_back("HALYRD,2031-06-20,100,C\n");
  rows_.push_back(rows_.front());
  write(joined(rows_));
  const auto outcome = run("out");
  EXPECT_TRUE(outcome.record.rows.adds_up());
  const json record = json::parse(content_of(outcome.folder + "/run.json"));
  const json& rows = record["rows"];
  EXPECT_EQ(rows["read"], rows_.size());
  EXPECT_EQ(rows["read"].get<int>(),
            rows["used"].get<int>() + rows["spare"].get<int>() + rows["dropped"].get<int>());
  int with_reason = 0, used = 0;
  for (const auto& [word, count] : record["reasons"].items()) with_reason += count.get<int>();
  for (const auto& [name, underlying] : record["underlyings"].items())
    used += underlying["used"].get<int>();
  EXPECT_EQ(with_reason + rows["used"].get<int>(), rows["read"]);
  EXPECT_EQ(used, rows["used"]);
  EXPECT_EQ(record["reasons"]["unreadable"], 2);
  EXPECT_EQ(record["reasons"]["expired"], 1);
  EXPECT_EQ(record["reasons"]["duplicate"], 1);
  const std::string ledger = content_of(outcome.folder + "/ledger.csv");
  EXPECT_EQ(static_cast<std::size_t>(std::count(ledger.begin(), ledger.end(), '\n')),
            rows_.size() + 1);
}

TEST_F(RunNightTest, StoredSurfacesReloadToTheMarkedOnes) {
  write(joined(rows_));
  const auto outcome = run("out");
  for (const auto& m : outcome.underlyings) {
    const auto text = content_of(outcome.folder + "/surfaces/" +
                                 publish::encode_file_name(m.record.name) + ".json");
    const auto stored = publish::surface_from_json(text, m.record.name);
    ASSERT_TRUE(stored.ok()) << stored.failure().text();
    ASSERT_EQ(stored->surface.slices.size(), m.surface->slices.size());
    for (std::size_t i = 0; i < m.surface->slices.size(); ++i) {
      EXPECT_EQ(stored->surface.slices[i].expiry, m.surface->slices[i].expiry);
      EXPECT_EQ(stored->surface.slices[i].year_fraction, m.surface->slices[i].year_fraction);
      EXPECT_EQ(stored->surface.slices[i].backbone.theta, m.surface->slices[i].backbone.theta);
    }
  }
}

TEST_F(RunNightTest, LongNameInManyBytesIsPublished) {
  // Three times as long as a file name: as long as file systems take.
  std::string name;
  for (int i = 0; i < 40; ++i) name += "\xC3\xA9";
  write(joined(rows_of(name, 100)));
  const auto outcome = run("out");
  EXPECT_TRUE(fs::is_regular_file(outcome.folder + "/surfaces/" + publish::encode_file_name(name) +
                                  ".json"));
}

TEST_F(RunNightTest, LaterRunReplacesTheFolderWhole) {
  write(joined(rows_));
  run("out");
  write(joined(rows_of("HALYRD", 100)));
  const auto outcome = run("out");
  EXPECT_FALSE(fs::exists(outcome.folder + "/surfaces/KELPWK.json"));
}

TEST_F(RunNightTest, RunThatMarksNothingGoesBesideTheGoodOne) {
  write(joined(rows_));
  const auto good = run("out");
  const auto before = files_of(good.folder);
  write(joined({"HALYRD,2031-06-20,100,C,0,1,100\n"}));
  const auto outcome = run("out");
  EXPECT_EQ(outcome.folder, good.folder + "-refused");
  EXPECT_EQ(outcome.record.underlyings.at(0).status, publish::Status::refused);
  EXPECT_EQ(files_of(good.folder), before);
}

TEST_F(RunNightTest, RunThatMarksNothingIsPublishedWhereThereIsNoOther) {
  write(kHeader);
  const auto outcome = run("out");
  EXPECT_EQ(outcome.folder, folder_ + "/out/2031-03-14");
  EXPECT_EQ(outcome.record.rows.read, 0);
  EXPECT_TRUE(outcome.underlyings.empty());
}

TEST_F(RunNightTest, BadInputsPublishNothing) {
  const auto missing = attempt("out");
  ASSERT_FALSE(missing.ok());
  EXPECT_EQ(missing.failure().fault, Fault::no_input);
  write("\xFF\xFE");
  const auto broken = attempt("out");
  ASSERT_FALSE(broken.ok());
  EXPECT_EQ(broken.failure().fault, Fault::not_quotes);
  write(joined(rows_));
  const auto undated = attempt("out", 1, "yesterday");
  ASSERT_FALSE(undated.ok());
  EXPECT_EQ(undated.failure().fault, Fault::usage);
  EXPECT_FALSE(fs::exists(folder_ + "/out"));
}

TEST_F(RunNightTest, PlaceThatCannotBeWrittenIsCannotCreate) {
  write(joined(rows_));
  const auto outcome = attempt("quotes.csv");
  ASSERT_FALSE(outcome.ok());
  EXPECT_EQ(outcome.failure().fault, Fault::cannot_create);
}

TEST_F(RunNightTest, StopInAnyStageBeforeTheLastPublishesNothing) {
  write(joined(rows_));
  const auto before = files_of(run("out").folder);
  write(joined(rows_of("HALYRD", 100)));
  const auto config = parse_config("as_of = '2031-03-14'\n[[source]]\nfiles = 'quotes.csv'\n",
                                   "night.toml", folder_);
  for (const std::string last : {"read", "clean", "mark", "publish"}) {
    std::stop_source source;
    const auto progress = [&](std::string_view stage, std::int64_t, std::int64_t) {
      if (stage == last) source.request_stop();
    };
    const auto outcome = run_night(*config, {folder_ + "/out", 2, progress, 0, source.get_token()});
    ASSERT_FALSE(outcome.ok()) << last;
    EXPECT_EQ(outcome.failure().fault, Fault::stopped);
    EXPECT_EQ(files_of(folder_ + "/out/2031-03-14"), before);
    EXPECT_FALSE(fs::exists(folder_ + "/out/.partial-2031-03-14"));
  }
}

TEST_F(RunNightTest, SumOfTheAccountIsTold) {
  write(joined(rows_));
  const auto outcome = run("out");
  EXPECT_EQ(outcome.run_sha256, publish::digest_file(outcome.folder + "/run.json")->sha256);
}

TEST_F(RunNightTest, ProgressTellsEveryStageAndEveryUnderlyingOnce) {
  write(joined(rows_));
  const auto config = parse_config("as_of = '2031-03-14'\n[[source]]\nfiles = 'quotes.csv'\n",
                                   "night.toml", folder_);
  std::vector<std::string> stages;
  std::vector<std::int64_t> marked;
  const auto progress = [&](std::string_view stage, std::int64_t done, std::int64_t total) {
    if (stages.empty() || stages.back() != stage) stages.emplace_back(stage);
    if (stage != "mark" || total == 0) return;
    EXPECT_EQ(total, 3);
    marked.push_back(done);
  };
  ASSERT_TRUE(run_night(*config, {folder_ + "/out", 2, progress}).ok());
  EXPECT_EQ(stages,
            (std::vector<std::string>{"read", "clean", "mark", "carry", "publish", "report"}));
  EXPECT_EQ(marked, (std::vector<std::int64_t>{1, 2, 3}));
  const json timings = json::parse(content_of(folder_ + "/out/2031-03-14/timings.json"));
  ASSERT_EQ(timings["stages"].size(), stages.size());
  for (std::size_t i = 0; i < stages.size(); ++i)
    EXPECT_EQ(timings["stages"][i]["stage"], stages[i]);
  EXPECT_EQ(timings["threads"], 2);
  EXPECT_GT(timings["peak_memory_bytes"], 0);
}

}  // namespace
}  // namespace duskgrid::night
