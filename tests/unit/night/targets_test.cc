// The published bytes do not depend on the SIMD target that ran.
#include <gtest/gtest.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <iterator>

#include "night/run.h"
#include "pricing/invert_batch.h"

namespace duskgrid::night {
namespace {

namespace fs = std::filesystem;

std::string slurp(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

TEST(RunNight, EverySimdTargetPublishesTheSameBytes) {
  const auto config = read_config(DUSKGRID_SOURCE_DIR "/data/demo_night/night.toml");
  ASSERT_TRUE(config.ok()) << config.failure().text();
  const fs::path scratch =
      fs::path(testing::TempDir()) / ("targets_test_" + std::to_string(::getpid()));
  const auto targets = pricing::batch_targets();
  std::vector<fs::path> folders;
  for (const auto& target : targets) {
    pricing::use_batch_target(target);
    const auto outcome = run_night(*config, {(scratch / target).string(), 1, {}});
    ASSERT_TRUE(outcome.ok()) << outcome.failure().text();
    folders.emplace_back(outcome->folder);
  }
  pricing::use_batch_target("");
  for (const auto& entry : fs::recursive_directory_iterator(folders.front())) {
    const auto name = fs::relative(entry.path(), folders.front());
    if (!entry.is_regular_file() || name == "timings.json") continue;
    for (const auto& folder : folders) EXPECT_EQ(slurp(entry.path()), slurp(folder / name)) << name;
  }
  fs::remove_all(scratch);
}

}  // namespace
}  // namespace duskgrid::night
