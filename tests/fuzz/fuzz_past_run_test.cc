// Hostile run folders: mutated at random, run.json and expiries.csv must give a failure that says
// something, or a run whose parts are in their ranges. The seed of each run is its number.
#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

#include "mutate.h"
#include "publish/past_run.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;
using namespace std::chrono_literals;

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "{",
                                                 "}",
                                                 "[",
                                                 "]",
                                                 ":",
                                                 ",",
                                                 "null",
                                                 "true",
                                                 "\n",
                                                 "0",
                                                 "-1",
                                                 "1e9",
                                                 "1e999",
                                                 "NaN",
                                                 "\\u0000",
                                                 "\xFF",
                                                 "'",
                                                 "=",
                                                 "\"x\"",
                                                 "[]",
                                                 "{}",
                                                 "2031",
                                                 "99M",
                                                 "strike",
                                                 "\"delta\"",
                                                 "9999999999",
                                                 "1970-01-01T00:00:00Z",
                                                 "Europe/Paris",
                                                 "carried",
                                                 std::string(300, '9'),
                                                 std::string(300, '['),
                                                 std::string(1, '\0')};
  return kMorsels;
}

std::string account() {
  RunRecord record;
  record.as_of = {std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h,
                  {"", std::chrono::minutes{-300}}};
  record.configuration =
      R"({"zone": "", "grid": {"axis": "moneyness", "points": [0.9, 1.1], "tenors": ["3M", "1Y"]},
          "compare": {"tolerance": 0.02, "times_typical": 5.0, "deviations": 4, "least_nights": 4,
          "most_nights": 9}})";
  record.underlyings.push_back({"HALYRD", Status::flagged, true, 2, 8, 7, 0, "", "2 of 3"});
  record.underlyings.push_back(
      {"=A", Status::carried, true, 1, 0, 0, 0, "2031-03-13T16:00:00-05:00", "carried"});
  return run_to_json(record);
}

TEST(FuzzPastRun, MutatedFoldersGiveAFailureOrARunInItsRanges) {
  const std::string folder = testing::TempDir() + "fuzz_past_run";
  fs::create_directories(folder);
  const std::string expiries = std::string(kExpiriesHeader) +
                               "'=A,2031-06-20T16:00:00-05:00,10,8,7,0.001,00112233aabbccdd\n"
                               "HALYRD,2031-06-20T16:00:00-05:00,10,0,0,,ffee\n";
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const bool first = run % 2 == 0;
    const std::string json = first ? mutator.mutate({account()}) : account();
    const std::string csv = first ? expiries : mutator.mutate({expiries});
    std::ofstream(folder + "/run.json", std::ios::binary) << json;
    std::ofstream(folder + "/expiries.csv", std::ios::binary) << csv;
    const auto read = read_past_run(folder);
    if (read) {
      ++taken;
      EXPECT_EQ(read->compare.problem(), std::nullopt);
      EXPECT_EQ(read->grid.problem(), std::nullopt);
      EXPECT_EQ(read->grid.tenors.size(), read->grid.tenor_words.size());
      EXPECT_EQ(read->as_of.clock.problem(), std::nullopt);
    } else {
      EXPECT_EQ(read.failure().fault, Fault::not_quotes);
      EXPECT_FALSE(read.failure().detail.empty());
    }
    ASSERT_FALSE(HasFailure()) << "run " << run << ":\n" << json << csv;
  }
  EXPECT_GT(taken, fuzz::runs() / 20);
  EXPECT_LT(taken, fuzz::runs());
  fs::remove_all(folder);
}

}  // namespace
}  // namespace duskgrid::publish
