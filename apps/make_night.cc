// make_night: invents, from a seed, a night of option quotes of an exchange that does
// not exist. Same seed and as-of, same quotes, on any machine: the demo night, or with
// --underlyings a universe of any size.
#include <fmt/format.h>

#include <CLI/CLI.hpp>
#include <cstdio>
#include <filesystem>
#include <optional>
#include <string>
#include <system_error>

#include "make_night_scenario.h"
#include "make_night_universe.h"

namespace {

using namespace duskgrid::make_night;

// Exit statuses of sysexits.h.
constexpr int kUsage = 64;
constexpr int kCannotCreate = 73;

int fail(int status, const std::string& text) {
  fmt::print(stderr, "make_night: {}\n", text);
  return status;
}

int write_night(const std::filesystem::path& folder, const World& world) {
  for (const NightFile& file : demo_night(world)) {
    if (!store(folder, file)) {
      return fail(kCannotCreate, (folder / file.name).string() + ": cannot be written");
    }
    fmt::print(stderr, "{:<20} {:>8} bytes before packing\n", file.name, file.text.size());
  }
  return 0;
}

int write(const std::filesystem::path& folder, const World& world,
          const std::optional<UniverseSize>& size) {
  std::error_code error;
  std::filesystem::create_directories(folder, error);
  if (error) return fail(kCannotCreate, folder.string() + ": " + error.message());
  if (!size) return write_night(folder, world);
  const std::string problem = write_universe(folder, world, *size);
  return problem.empty() ? 0 : fail(kCannotCreate, problem);
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app{"Invents a night of option quotes of an exchange that does not exist.",
               "make_night"};
  std::string out;
  std::string as_of = "2031-03-14T16:00:00-05:00";
  World world;
  app.add_option("--out", out, "Folder to write the night to")->required();
  app.add_option("--seed", world.seed, "Same seed, same night")->capture_default_str();
  app.add_option("--as-of", as_of, "Instant the night is taken at")->capture_default_str();
  bool next = false;
  app.add_flag("--next-night", next,
               "The night after it instead, with changes planted;\nchanges.tsv lists them");
  UniverseSize size;
  auto* underlyings =
      app.add_option("--underlyings", size.underlyings,
                     "In place of the demo night, a universe of so many\nunderlyings and its truth")
          ->check(CLI::Range(1, 1'000'000));
  app.add_option("--quotes", size.quotes, "So many contracts in that universe")
      ->needs(underlyings)
      ->check(CLI::Range(1, 100'000'000))
      ->capture_default_str();
  app.footer(
      "Examples:\n"
      "  make_night --out data/demo_night\n"
      "  make_night --underlyings 6000 --quotes 1500000 --out universe");
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : kUsage;
  }
  const auto instant = parse_as_of(as_of);
  if (!instant) {
    return fail(kUsage, fmt::format("--as-of = {}, must be like 2031-03-14T16:00:00-05:00", as_of));
  }
  world.listed = *instant;
  world.as_of = next ? next_business_day(*instant) : *instant;
  return write(out, world, underlyings->count() > 0 ? std::optional(size) : std::nullopt);
}
