#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "arbitrage/certificate.h"
#include "arbitrage/grid_checks.h"
#include "arbitrage/surface_checks.h"
#include "check_folder.h"
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
  std::size_t unsound = 0;   // run folders
  bool header = false;

  void print(const std::vector<arbitrage::Violation>& found, const std::string& underlying,
             const quotes::Clock& clock) {
    if (!header && !found.empty()) fmt::print("{}", publish::kViolationsHeader);
    header = header || !found.empty();
    for (const auto& v : found) fmt::print("{}", publish::violations_line(v, underlying, clock));
    violations += found.size();
  }
};

std::string counted(std::size_t n, const char* one, const char* many) {
  return fmt::format("{} {}", n, n == 1 ? one : many);
}

// What a line on standard error starts with.
std::string heading(const std::string& path, const std::string& underlying) {
  return underlying.empty() ? path : path + ": " + underlying;
}

// "; the most at 2031-06-20T16:00:00-05:00, strike 100: butterfly, 0.52", nothing without any.
std::string dearest(const std::vector<arbitrage::Violation>& found, const quotes::Clock& clock) {
  const auto most = std::max_element(
      found.begin(), found.end(), [](const auto& a, const auto& b) { return a.amount < b.amount; });
  if (most == found.end()) return "";
  const std::string time = most->expiry == quotes::kNoInstant
                               ? fmt::format("t={:.6g}", most->legs.front().year_fraction)
                               : quotes::format_instant(clock, most->expiry);
  const double strike = most->strikes[most->kind == arbitrage::Kind::butterfly ? 1 : 0];
  return fmt::format("; the most at {}, strike {:.10g}: {}, {:.6g}", time, strike,
                     arbitrage::word(most->kind), most->amount);
}

Result<bool> check_grid_file(const std::string& path, double tolerance, Tally& tally) {
  const auto file = publish::read_grid(path);
  if (!file) return file.failure();
  for (const auto& grid : file->grids) {
    const auto found = arbitrage::check_grid(grid.slices, tolerance);
    tally.print(found, grid.underlying, file->clock);
    fmt::print(stderr, "{}: {}, arbitrages found: {}{}\n", heading(path, grid.underlying),
               counted(grid.slices.size(), "expiry or tenor", "expiries and tenors"), found.size(),
               dearest(found, file->clock));
  }
  return true;
}

// What is said of one finding: the statement, its expiries, and where.
class Told {
 public:
  Told(const publish::StoredSurface& stored, const arbitrage::Finding& finding)
      : clock_(stored.as_of.clock), slices_(stored.surface.slices), finding_(finding) {}

  std::string text(const std::optional<arbitrage::Violation>& trade) const {
    return statement() + place() + (std::isfinite(finding_.k) || !trade ? "" : most(*trade));
  }

 private:
  std::string expiry(std::size_t slice) const {
    return quotes::format_instant(clock_, slices_[slice].expiry);
  }

  std::string statement() const {
    using arbitrage::Proof;
    const std::string word(arbitrage::word(finding_.proof));
    const std::string state = finding_.broken ? "broken" : "not decided";
    const std::size_t i = finding_.slice;
    switch (finding_.proof) {
      case Proof::parameters: return word + ": a number is too small or too large to work with";
      case Proof::calendar:
        return fmt::format("{} {} from {} to {}", word, state, expiry(i), expiry(i + 1));
      case Proof::between:
        return fmt::format("{} {} and {}: {}", word, expiry(i), expiry(i + 1), state);
      case Proof::after: return fmt::format("{} {}: {}", word, expiry(i), state);
      default: return fmt::format("{} {} at {}", word, state, expiry(i));
    }
  }

  std::string place() const {
    if (finding_.proof == arbitrage::Proof::parameters) return "";
    const double k = finding_.k, strike = slices_[finding_.slice].forward * std::exp(k);
    if (std::isnormal(strike)) return fmt::format(", strike {:.8g} (k {:.6g})", strike, k);
    const char* wing = k < 0 ? " in the left wing" : " in the right wing";
    return std::isfinite(k) ? fmt::format("{} (k {:.6g})", wing, k) : wing;
  }

  // A wing may be one end of something wider.
  std::string most(const arbitrage::Violation& trade) const {
    const double strike = trade.strikes[trade.kind == arbitrage::Kind::calendar ? 0 : 1];
    const std::string text = fmt::format(", the most at strike {:.8g}", strike);
    // Between expiries the forward is not that of the slice.
    if (finding_.proof == arbitrage::Proof::between) return text;
    const double k = std::log(strike / slices_[finding_.slice].forward);
    return text + fmt::format(" (k {:.6g})", k);
  }

  const quotes::Clock& clock_;
  const std::vector<surface::Slice>& slices_;
  const arbitrage::Finding& finding_;
};

Result<bool> check_surface_file(const std::string& path, const std::string& text, Tally& tally) {
  const auto stored = publish::surface_from_json(text, path);
  if (!stored) return stored.failure();
  const auto& surface = stored->surface;
  const auto certificate = arbitrage::certify(surface);
  std::vector<arbitrage::Violation> found;
  std::string verdict =
      certificate.certified ? "certified: proved free of arbitrage" : "not certified";
  for (const auto& finding : certificate.findings) {
    const auto trade = arbitrage::violation_of(surface, finding);
    verdict += "; " + Told(*stored, finding).text(trade);
    if (trade) found.push_back(*trade);
  }
  tally.print(found, surface.underlying, stored->as_of.clock);
  fmt::print(stderr, "{}: {}, {}\n", heading(path, surface.underlying),
             counted(surface.slices.size(), "expiry", "expiries"), verdict);
  tally.unproved += certificate.certified ? 0 : 1;
  return true;
}

Result<bool> check_run(const std::string& folder, Tally& tally) {
  const auto sound = check_folder(folder);
  if (sound && !*sound) ++tally.unsound;
  return sound;
}

// A stored surface is JSON, which no CSV header looks like.
Result<bool> check_file(const std::string& path, double tolerance, Tally& tally) {
  std::error_code unknown;
  if (std::filesystem::is_directory(path, unknown)) return check_run(path, tally);
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
  int worst = console::kDone;
  for (const auto& path : args.files)
    if (auto checked = check_file(path, args.tolerance, tally); !checked)
      worst = std::max(worst, console::report(checked.failure()));
  const auto findings = tally.violations + tally.unproved + tally.unsound;
  return findings == 0 ? worst : std::max<int>(worst, console::kFlagged);
}

}  // namespace

void add_check(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("check",
                                         "Look for arbitrage in any grid or surface,\n"
                                         "or hold a run folder against its account");
  auto args = std::make_shared<CheckArguments>();
  command
      ->add_option("files", args->files,
                   "A grid as CSV with columns strike, vol,\n"
                   "forward, and year_fraction or as_of and\n"
                   "expiry; or surfaces/NAME.json; or the\n"
                   "folder of a run")
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
      "output, a line a grid or surface to standard error. A file that cannot be\n"
      "read is named there, and the others are checked all the same.\n\n"
      "Of a run folder: every file has the SHA-256 that run.json says and none is\n"
      "beside them, the counts are those of the tables, every surface is proved\n"
      "again, and every node of the grid is what its surface gives. The account of\n"
      "this goes to standard output.\n\n"
      "Examples:\n"
      "  duskgrid check marks/2031-03-14/grid.csv\n"
      "  duskgrid check --tolerance 1e-5 theirs.csv > breaks.csv\n"
      "  duskgrid check marks/2031-03-14/surfaces/*.json\n"
      "  duskgrid check marks/latest > approval.txt\n\n"
      "Exit status, the highest that applies: 0 none found; 3 some found, a\n"
      "surface is not proved, or a folder is not sound; 64 usage; 65 not such a\n"
      "file; 66 no input; 70 internal.");
  command->callback([args, &status] { status = check(*args); });
}

}  // namespace duskgrid::commands
