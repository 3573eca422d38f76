// Hostile grid files: mutated at random they must give a failure that says something, or a grid
// that can be checked for arbitrage. The seed of each run is its number, printed when it fails.
#include <gtest/gtest.h>
#include <unistd.h>

#include <cmath>
#include <filesystem>
#include <fstream>

#include "arbitrage/grid_checks.h"
#include "mutate.h"
#include "publish/grid_file.h"
#include "publish/tables.h"

namespace duskgrid::publish {
namespace {

const std::vector<std::string>& seed_texts() {
  static const std::vector<std::string> kTexts{
      std::string(kGridHeader) +
          "2031-03-14T16:00:00-05:00,HALYRD,2031-06-20T16:00:00-04:00,,0.268,101,0.99,strike,95,95,"
          "0.21,,,observed\n"
          "2031-03-14T16:00:00-05:00,HALYRD,2031-06-20T16:00:00-04:00,,0.268,101,0.99,strike,101,"
          "101,"
          "0.2,,,observed\n"
          "2031-03-14T16:00:00-05:00,\"'=K,1\",2031-09-14T16:00:00-04:00,6M,0.5,42,0.98,strike,42,"
          "42,"
          "0.3,,,interpolated\n",
      "\xEF\xBB\xBFstrike,vol,forward,year_fraction\r\n95,0.2,100,0.5\r\n105,0.3,100,0.5\r\n"
      "95,0.2,100,1\r\n100,0.21,100,1\r\n105,0.3,100,1\r\n",
      "as_of,expiry,strike,vol,forward\n2031-03-14,20320313,95,0.2,100\n"
      "1931292000,2031-12-19 09:30,95,0.2,100\n",
  };
  return kTexts;
}

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "\"\"",
                                                 "\n",
                                                 "\r",
                                                 "\r\n",
                                                 ",",
                                                 ",,",
                                                 ";",
                                                 " ",
                                                 "'",
                                                 "0",
                                                 "-0.2",
                                                 "nan",
                                                 "inf",
                                                 "1e999",
                                                 "1e-320",
                                                 "1e308",
                                                 "5e-324",
                                                 "0x1p3",
                                                 "99999999999",
                                                 "2031-02-30",
                                                 "strike,",
                                                 "vol",
                                                 "forward,",
                                                 "95,0.2,100,0.5\n",
                                                 "\xFF\xFE",
                                                 "\xEF\xBB\xBF",
                                                 std::string(1, '\0'),
                                                 std::string(300, '9'),
                                                 std::string(300, ',')};
  return kMorsels;
}

bool positive(double v) { return std::isfinite(v) && v > 0; }

void check_slice(const arbitrage::VolSlice& slice) {
  EXPECT_TRUE(positive(slice.year_fraction) && positive(slice.forward) &&
              positive(slice.discount_factor));
  ASSERT_FALSE(slice.nodes.empty());
  double last = 0;
  for (const auto& node : slice.nodes) {
    EXPECT_TRUE(positive(node.strike) && positive(node.vol));
    EXPECT_GT(node.strike, last);
    last = node.strike;
  }
}

void check_file(const GridFile& file) {
  EXPECT_EQ(file.clock.problem(), std::nullopt);
  ASSERT_FALSE(file.grids.empty());
  for (const auto& grid : file.grids) {
    ASSERT_FALSE(grid.slices.empty());
    double last = 0;
    for (const auto& slice : grid.slices) {
      check_slice(slice);
      EXPECT_GT(slice.year_fraction, last);
      last = slice.year_fraction;
    }
    constexpr double kTolerance = 1e-9;
    for (const auto& v : arbitrage::check_grid(grid.slices, kTolerance)) {
      EXPECT_GT(v.amount, 0);
      EXPECT_FALSE(violations_line(v, grid.underlying, file.clock).empty());
    }
  }
}

TEST(FuzzGridFile, MutatedFilesGiveAFailureOrAGridThatCanBeChecked) {
  const std::string path = testing::TempDir() + "fuzz_grid_" + std::to_string(::getpid());
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const std::string text = mutator.mutate(seed_texts());
    std::ofstream(path, std::ios::binary) << text;
    const auto file = read_grid(path);
    if (file) {
      check_file(*file);
      ++taken;
    } else {
      EXPECT_EQ(file.failure().fault, Fault::not_quotes);
      EXPECT_EQ(file.failure().where, path);
      EXPECT_FALSE(file.failure().detail.empty());
    }
    ASSERT_FALSE(HasFailure()) << "run " << run << ":\n" << text;
  }
  std::filesystem::remove(path);
  // Both ends of the reader must have been met, or the runs showed nothing.
  EXPECT_GT(taken, fuzz::runs() / 20);
  EXPECT_LT(taken, fuzz::runs());
}

}  // namespace
}  // namespace duskgrid::publish
