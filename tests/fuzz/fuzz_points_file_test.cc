// Hostile files of points: mutated at random they must give a failure that says something, or
// points that a surface can be asked at. The seed of each run is its number, printed when it fails.
#include <gtest/gtest.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>

#include "mutate.h"
#include "publish/points_file.h"
#include "publish/tables.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;

const std::vector<std::string>& seed_texts() {
  static const std::vector<std::string> kTexts{
      "strike,expiry\n95,2031-06-20\n101.5,2031-09-19T09:30\n120,1939752000\n",
      "\xEF\xBB\xBFtenor;log_moneyness;put_call\r\n1M;-0.1;P\r\n2Y;0.2;C\r\n3W;0;\r\n",
      std::string(kValuesHeader) +
          "2031-06-20T16:00:00-04:00,3M,0.25,101,0.99,95,-0.06,0.2,P,1,-0.2,0.01,9,0.02,0.3\n",
  };
  return kTexts;
}

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "\n",
                                                 "\r\n",
                                                 ",",
                                                 ";",
                                                 "'",
                                                 "0",
                                                 "-0.2",
                                                 "nan",
                                                 "inf",
                                                 "1e999",
                                                 "1e308",
                                                 "5e-324",
                                                 "99999999999",
                                                 "2031-02-30",
                                                 "2199-12-31",
                                                 "999Y",
                                                 "strike,",
                                                 "expiry",
                                                 "95,2031-06-20\n",
                                                 "\xFF\xFE",
                                                 std::string(1, '\0'),
                                                 std::string(300, '9'),
                                                 std::string(300, ',')};
  return kMorsels;
}

// A line of values never holds what is no number.
void check_point(const StoredSurface& stored, const WantedPoint& wanted) {
  EXPECT_GT(wanted.line, 1);
  EXPECT_EQ(problem_of(wanted.point), std::nullopt);
  InstantTexts instants(stored.as_of.clock);
  std::vector<ValueTime> times;
  if (auto found = times_of_expiry(stored, wanted.expiry))
    times = std::move(*found);
  else
    EXPECT_FALSE(found.failure().detail.empty());
  if (auto found = time_of_tenor(stored, wanted.tenor)) times.push_back(std::move(*found));
  for (const auto& time : times) {
    const surface::TimedSmile smile(stored.surface, time.year_fraction);
    const auto row = value_at(stored.surface, smile, time.carried, wanted.point);
    const std::string line = values_line(time, row, instants);
    EXPECT_EQ(line.find("nan"), std::string::npos) << line;
    EXPECT_EQ(line.find("inf"), std::string::npos) << line;
  }
}

TEST(FuzzPointsFile, MutatedFilesGiveAFailureOrPointsThatHaveValues) {
  const quotes::Instant as_of = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
  const StoredSurface stored{{as_of, {"", -300min}},
                             {"HALYRD",
                              100,
                              {{as_of + 2400h, 0.27, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2},
                               {as_of + 9000h, 1.03, 104, 0.97, {0.04, 0.25, 0.2}, -0.5, 0.5}}}};
  const std::string path = testing::TempDir() + "fuzz_points_" + std::to_string(::getpid());
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const std::string text = mutator.mutate(seed_texts());
    std::ofstream(path, std::ios::binary) << text;
    const auto points = read_points(path);
    if (points) {
      for (const auto& point : *points) check_point(stored, point);
      ++taken;
    } else {
      EXPECT_EQ(points.failure().fault, Fault::not_quotes);
      EXPECT_EQ(points.failure().where, path);
      EXPECT_FALSE(points.failure().detail.empty());
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
