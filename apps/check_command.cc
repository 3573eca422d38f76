#include <fmt/format.h>

#include <cmath>
#include <fstream>
#include <iterator>

#include "arbitrage/certificate.h"
#include "arbitrage/grid_checks.h"
#include "arbitrage/surface_checks.h"
#include "commands.h"
#include "console.h"
#include "publish/grid_file.h"
#include "publish/surface_json.h"
#include "publish/tables.h"

namespace duskgrid::commands {
namespace {

struct CheckArguments {
  std::vector<std::string> files;
  double tolerance = 1e-9;
};

struct Tally {
  std::size_t violations = 0;
  std::size_t unproved = 0;  // surfaces
  bool header = false;

  void print(const std::vector<arbitrage::Violation>& found, const std::string& underlying,
             const quotes::Clock& clock) {
    if (!header && !found.empty()) fmt::print("{}", publish::kViolationsHeader);
    header = header || !found.empty();
    for (const auto& v : found) fmt::print("{}", publish::violations_line(v, underlying, clock));
    violations += found.size();
  }
};

Result<bool> check_grid_file(const std::string& path, double tolerance, Tally& tally) {
  const auto file = publish::read_grid(path);
  if (!file) return file.failure();
  for (const auto& grid : file->grids) {
    const auto found = arbitrage::check_grid(grid.slices, tolerance);
    tally.print(found, grid.underlying, file->clock);
    fmt::print(stderr, "{}: {} expiries and tenors, arbitrages found: {}\n",
               grid.underlying.empty() ? path : grid.underlying, grid.slices.size(), found.size());
  }
  return true;
}

// "certified", or each statement that is not proved and where.
std::string verdict(const arbitrage::Certificate& certificate) {
  if (certificate.certified) return "certified: proved free of arbitrage";
  std::string out = "not certified";
  for (const auto& f : certificate.findings)
    out += fmt::format("; {} of expiry {} {} near k {:.6g}", arbitrage::word(f.proof), f.slice + 1,
                       f.broken ? "broken" : "not decided", f.k);
  return out;
}

Result<bool> check_surface_file(const std::string& path, const std::string& text, Tally& tally) {
  const auto stored = publish::surface_from_json(text, path);
  if (!stored) return stored.failure();
  const auto certificate = arbitrage::certify(stored->surface);
  const auto found = arbitrage::violations_of(stored->surface, certificate);
  tally.print(found, stored->surface.underlying, stored->as_of.clock);
  fmt::print(stderr, "{}: {} expiries, {}\n", stored->surface.underlying,
             stored->surface.slices.size(), verdict(certificate));
  tally.unproved += certificate.certified ? 0 : 1;
  return true;
}

// A stored surface is JSON, which no CSV header looks like.
Result<bool> check_file(const std::string& path, double tolerance, Tally& tally) {
  std::ifstream file(path, std::ios::binary);
  char first = 0;
  if (!(file >> first) || first != '{') return check_grid_file(path, tolerance, tally);
  file.seekg(0);
  const std::string text{std::istreambuf_iterator<char>(file), {}};
  return check_surface_file(path, text, tally);
}

int check(const CheckArguments& args) {
  if (!(args.tolerance >= 0) || !std::isfinite(args.tolerance))
    return console::report({Fault::usage, "", "--tolerance must be a number >= 0"});
  Tally tally;
  for (const auto& path : args.files)
    if (auto checked = check_file(path, args.tolerance, tally); !checked)
      return console::report(checked.failure());
  return tally.violations == 0 && tally.unproved == 0 ? console::kDone : console::kFlagged;
}

}  // namespace

void add_check(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("check", "Look for arbitrage in any grid or surface");
  auto args = std::make_shared<CheckArguments>();
  command
      ->add_option("files", args->files,
                   "A grid as CSV with columns strike, vol,\n"
                   "forward, and year_fraction or as_of and\n"
                   "expiry; or surfaces/NAME.json")
      ->required();
  command
      ->add_option("--tolerance", args->tolerance,
                   "Smallest break that counts, a fraction of\n"
                   "the forward; vols printed with d decimals\n"
                   "need about 10^-d sqrt(years)")
      ->capture_default_str();
  command->footer(
      "A grid is checked at its nodes. A stored surface is proved free of arbitrage\n"
      "everywhere, or where it is not is found. Violations go as CSV to standard\n"
      "output, a line a grid or surface to standard error.\n\n"
      "Examples:\n"
      "  duskgrid check marks/2031-03-14/grid.csv\n"
      "  duskgrid check --tolerance 1e-5 theirs.csv > breaks.csv\n"
      "  duskgrid check marks/2031-03-14/surfaces/*.json\n\n"
      "Exit status: 0 none found; 3 some found, or a surface is not proved; 65 not such a file; 66 "
      "no input.");
  command->callback([args, &status] { status = check(*args); });
}

}  // namespace duskgrid::commands
