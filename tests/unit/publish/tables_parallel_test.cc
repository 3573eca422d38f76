#include "publish/tables_parallel.h"

#include <gtest/gtest.h>
#include <tbb/global_control.h>
#include <unistd.h>

#include <cerrno>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "publish/sync_files.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

std::string lines_by(std::size_t threads, std::size_t count) {
  const tbb::global_control limit(tbb::global_control::max_allowed_parallelism, threads);
  const fs::path out = fs::path(testing::TempDir()) / ("lines" + std::to_string(::getpid()));
  auto folder = RunFolder::create(out.string(), "night");
  if (!folder) return "no folder";
  const auto written = (*folder)->add("lines.csv", [&](RunFile& file) {
    write_lines(file, count, 7, {},
                [](std::size_t first, std::size_t last, std::string& text, InstantTexts& instants) {
                  for (std::size_t i = first; i < last; ++i)
                    text += std::to_string(i) + ',' +
                            instants.of(quotes::Instant{std::chrono::seconds{i % 5}}) + '\n';
                });
  });
  if (!written || !(*folder)->commit()) return "not written";
  std::ifstream file(out / "night" / "lines.csv", std::ios::binary);
  const std::string text{std::istreambuf_iterator<char>(file), {}};
  file.close();
  folder->reset();
  fs::remove_all(out);
  return text;
}

TEST(WriteLines, LinesComeInOrderForAnyNumberOfThreads) {
  std::string expected;
  for (std::size_t i = 0; i < 1000; ++i)
    expected += std::to_string(i) + ",1970-01-01T00:00:0" + std::to_string(i % 5) + "+00:00\n";
  for (const std::size_t threads : {1, 2, 8}) EXPECT_EQ(lines_by(threads, 1000), expected);
}

TEST(WriteLines, NothingToWriteLeavesAnEmptyFile) { EXPECT_EQ(lines_by(2, 0), ""); }

TEST(SyncFiles, FirstPathThatCannotBeSyncedIsNamed) {
  const std::string sound = testing::TempDir();
  EXPECT_EQ(sync_files({}), "");
  EXPECT_EQ(sync_files({sound, sound, sound}), "");
  EXPECT_EQ(sync_files({sound, sound + "/none-a", sound, sound + "/none-b"}), sound + "/none-a");
  EXPECT_EQ(errno, ENOENT);
}

}  // namespace
}  // namespace duskgrid::publish
