// Each folder under lib/ is a stage, and includes only itself and stages to its left.
#include <gtest/gtest.h>

#include <algorithm>
#include <array>
#include <filesystem>
#include <fstream>
#include <string>
#include <string_view>
#include <vector>

namespace duskgrid {
namespace {

namespace fs = std::filesystem;

constexpr std::array<std::string_view, 7> kStages{"quotes",    "market",  "pricing", "surface",
                                                  "arbitrage", "publish", "night"};

// Position of a stage, or kStages.size() for what is none.
std::size_t place_of(std::string_view stage) {
  return static_cast<std::size_t>(std::find(kStages.begin(), kStages.end(), stage) -
                                  kStages.begin());
}

// What a line includes in quotation marks; empty for all other lines.
std::string included(const std::string& line) {
  const auto hash = line.find_first_not_of(" \t");
  if (hash == std::string::npos || line[hash] != '#') return {};
  const auto word = line.find_first_not_of(" \t", hash + 1);
  if (word == std::string::npos || line.compare(word, 7, "include") != 0) return {};
  const auto open = line.find('"', word);
  const auto close = open == std::string::npos ? open : line.find('"', open + 1);
  return close == std::string::npos ? std::string() : line.substr(open + 1, close - open - 1);
}

struct Source {
  std::string path;
  std::string stage;
  std::vector<std::string> includes;
};

std::vector<Source> sources() {
  const fs::path lib = fs::path(DUSKGRID_SOURCE_DIR) / "lib";
  std::vector<Source> out;
  for (const auto& entry : fs::recursive_directory_iterator(lib)) {
    const auto extension = entry.path().extension();
    if (extension != ".h" && extension != ".cc") continue;
    const fs::path relative = fs::relative(entry.path(), lib);
    Source source{relative.string(), relative.begin()->string(), {}};
    std::ifstream file(entry.path());
    for (std::string line; std::getline(file, line);)
      if (auto what = included(line); !what.empty()) source.includes.push_back(std::move(what));
    out.push_back(std::move(source));
  }
  return out;
}

TEST(IncludeDirection, IncludeLinesAreFoundHoweverTheyAreSpaced) {
  EXPECT_EQ(included("#include \"quotes/load.h\""), "quotes/load.h");
  EXPECT_EQ(included("  #  include \"quotes/load.h\"  // why"), "quotes/load.h");
  EXPECT_EQ(included("#include <vector>"), "");
  EXPECT_EQ(included("// #include \"quotes/load.h\""), "");
  EXPECT_EQ(included(""), "");
}

TEST(IncludeDirection, EveryFolderOfTheLibraryIsAStageAndHasFiles) {
  std::array<int, kStages.size()> files{};
  for (const auto& source : sources()) {
    ASSERT_LT(place_of(source.stage), kStages.size()) << source.path << " is in no stage";
    ++files[place_of(source.stage)];
  }
  for (std::size_t i = 0; i < kStages.size(); ++i) EXPECT_GT(files[i], 0) << kStages[i];
}

TEST(IncludeDirection, StageIncludesOnlyItselfAndStagesToItsLeft) {
  int seen = 0;
  for (const auto& source : sources()) {
    for (const auto& what : source.includes) {
      const auto stage = what.substr(0, what.find('/'));
      ASSERT_LT(place_of(stage), kStages.size()) << source.path << " includes " << what;
      EXPECT_LE(place_of(stage), place_of(source.stage)) << source.path << " includes " << what;
      ++seen;
    }
  }
  EXPECT_GT(seen, 0);
}

}  // namespace
}  // namespace duskgrid
