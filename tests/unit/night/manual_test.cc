// The tables of docs/formats.md are those of the code, word for word.
#include <fmt/format.h>
#include <gtest/gtest.h>

#include <fstream>
#include <iterator>

#include "night/config.h"
#include "quotes/ledger.h"

namespace duskgrid::night {
namespace {

// What stands between <!-- name --> and <!-- end name -->.
std::string part_of_manual(const std::string& name) {
  std::ifstream file(DUSKGRID_SOURCE_DIR "/docs/formats.md");
  const std::string text{std::istreambuf_iterator<char>(file), {}};
  const std::string open = "<!-- " + name + " -->\n", close = "<!-- end " + name + " -->";
  const auto begin = text.find(open), end = text.find(close);
  if (begin == std::string::npos || end == std::string::npos) return "no part " + name;
  return text.substr(begin + open.size(), end - begin - open.size());
}

TEST(Manual, EveryConfigurationKeyIsListedAsTheReaderKnowsIt) {
  std::string table =
      "| table | key | what may stand there | default | meaning |\n"
      "|---|---|---|---|---|\n";
  for (const auto& o : options())
    table +=
        fmt::format("| {} | {} | {} | {} | {} |\n", o.table, o.key, o.range, o.fallback, o.meaning);
  EXPECT_EQ(part_of_manual("options"), table) << table;
}

TEST(Manual, EveryReasonIsListedAsTheLedgerWritesIt) {
  std::string table = "| reason | state | meaning |\n|---|---|---|\n";
  for (const auto& r : quotes::reasons())
    if (!r.word.empty())
      table += fmt::format("| {} | {} | {} |\n", r.word, quotes::word(r.state), r.meaning);
  EXPECT_EQ(part_of_manual("reasons"), table) << table;
}

}  // namespace
}  // namespace duskgrid::night
