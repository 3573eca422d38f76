// Damaged histories: with bytes changed at random, opening and reading must give a failure that
// says something or an answer, and never take the program down. The seed of each run is its number.
#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>
#include <iterator>
#include <random>

#include "mutate.h"
#include "publish/history.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;
using namespace std::chrono_literals;

HistoryNight night(int days) {
  const quotes::Clock clock{"", std::chrono::minutes{-300}};
  const quotes::Instant as_of =
      std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h + 24h * days;
  HistoryNight out{quotes::format_date(clock, as_of), {as_of, clock}, "0.1.0", {}};
  for (const char* name : {"HALYRD", "KELPWK"}) {
    HistoryUnderlying u;
    u.record = {name, Status::published, true, 2, 40, 39, 2, "", "all is well"};
    for (const int ahead : {98, 280})
      u.slices.push_back(
          {as_of + 24h * ahead, ahead / 365.0, 101.5, 0.99, 0.2, -0.3, 1.5, 40, 39, 0.001});
    for (int i = 0; i < 500; ++i) u.surface += std::to_string(i * i);
    u.surface = packed_surface(u.surface);
    out.underlyings.push_back(std::move(u));
  }
  return out;
}

TEST(FuzzHistory, DamagedFilesAreSaidToBeSoOrRead) {
  const std::string folder = testing::TempDir() + "fuzz_history";
  fs::create_directories(folder);
  const std::string path = folder + "/history.sqlite";
  {
    auto made = History::open(path, History::Access::write);
    ASSERT_TRUE(made.ok()) << made.failure().text();
    for (const int day : {0, 3, 4}) ASSERT_TRUE((*made)->write_night(night(day)).ok());
  }
  std::ifstream file(path, std::ios::binary);
  const std::string sound{std::istreambuf_iterator<char>(file), {}};
  ASSERT_GT(sound.size(), 4096U);
  int read = 0, refused = 0;
  for (int run = 0; run < fuzz::runs() / 4; ++run) {
    std::mt19937 random(static_cast<unsigned>(run));
    std::string bytes = sound;
    for (int left = 1 + static_cast<int>(random() % 20); left > 0; --left)
      bytes[random() % bytes.size()] = static_cast<char>(random());
    if (random() % 8 == 0) bytes.resize(random() % bytes.size());
    fs::remove(path + "-wal");
    fs::remove(path + "-shm");
    std::ofstream(path, std::ios::binary | std::ios::trunc) << bytes;
    bool sound_run = false;
    if (auto history = History::open(path, History::Access::read, 10ms)) {
      const auto series = (*history)->series("HALYRD", "", "");
      const auto terms = (*history)->terms("2031-03-20", 10);
      const auto surface = (*history)->surface("2031-03-14", "HALYRD");
      sound_run = series.ok() && terms.ok() && surface.ok();
      for (const auto* failed :
           {series.ok() ? nullptr : &series.failure(), terms.ok() ? nullptr : &terms.failure()}) {
        EXPECT_TRUE(!failed || !failed->detail.empty());
      }
    }
    if (auto history = History::open(path, History::Access::write, 10ms)) {
      const auto written = (*history)->write_night(night(5));
      EXPECT_TRUE(written.ok() || !written.failure().detail.empty());
    }
    (sound_run ? read : refused) += 1;
    ASSERT_FALSE(HasFailure()) << "run " << run;
  }
  EXPECT_GT(read, 0);
  EXPECT_GT(refused, 0);
  fs::remove_all(folder);
}

}  // namespace
}  // namespace duskgrid::publish
