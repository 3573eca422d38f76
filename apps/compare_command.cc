#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <memory>

#include "commands.h"
#include "console.h"
#include "night/changes.h"
#include "night/previous.h"

namespace duskgrid::commands {
namespace {

using publish::ChangeState;
using publish::UnderlyingChange;

struct CompareArguments {
  std::string before, now;
  double tolerance = 0;  // 0 takes that of the newer run
};

// What was compared, and how its lines are written.
struct Compared {
  std::vector<UnderlyingChange> changes;
  publish::Axis axis;
  quotes::AsOf before, now;
};

bool is_folder(const std::string& path) {
  std::error_code error;
  return std::filesystem::is_directory(path, error);
}

Result<publish::PastRun> read_run(const std::string& folder) {
  auto run = publish::read_past_run(folder);
  if (!run) return run;
  std::vector<std::string> remarks;
  night::read_surfaces(*run, remarks);
  if (!remarks.empty()) return Failure{Fault::not_quotes, folder, remarks.front()};
  return run;
}

Failure wrong_order() {
  return {Fault::usage, "", "the first must be the older night: the second is not later"};
}

Result<Compared> compare_folders(const CompareArguments& args) {
  auto before = read_run(args.before), now = read_run(args.now);
  if (!before) return before.failure();
  if (!now) return now.failure();
  if (!(before->as_of.instant < now->as_of.instant)) return wrong_order();
  auto options = now->compare;
  if (args.tolerance > 0) options.tolerance = args.tolerance;
  std::vector<std::string> remarks;
  const auto past =
      night::past_terms(args.now + "/..", quotes::format_date(now->as_of.clock, now->as_of.instant),
                        options, remarks);
  for (const auto& remark : remarks) fmt::print(stderr, "note: {}\n", remark);
  return Compared{night::compare_runs(*before, *now, past, options), now->grid.axis, before->as_of,
                  now->as_of};
}

Result<Compared> compare_files(const CompareArguments& args) {
  const auto before = publish::read_stored_surface(args.before);
  if (!before) return before.failure();
  const auto now = publish::read_stored_surface(args.now);
  if (!now) return now.failure();
  if (!(before->as_of.instant < now->as_of.instant)) return wrong_order();
  if (before->surface.underlying != now->surface.underlying)
    return Failure{Fault::usage, "",
                   "the two are surfaces of different names: " + before->surface.underlying +
                       " and " + now->surface.underlying};
  publish::CompareOptions options;
  if (args.tolerance > 0) options.tolerance = args.tolerance;
  const publish::GridOptions grid;
  const auto nodes = night::nodes_of(*now, grid);
  auto change = publish::compare_underlying(now->surface.underlying, {&*before, false, true, {}},
                                            {&*now, false, true, {}}, nodes, {}, options);
  return Compared{{std::move(change)}, grid.axis, before->as_of, now->as_of};
}

// In hundredths of vol, as traders say them.
std::string points(double vol) { return fmt::format("{:+.2f}", 100 * vol); }

void add_row(console::Table& table, const UnderlyingChange& change) {
  const auto* most = change.largest();
  const auto count = static_cast<std::int64_t>(change.nodes.size());
  std::vector<std::string> cells{console::shortened(change.underlying, 20),
                                 std::string(publish::word(change.state)),
                                 count > 0 ? console::grouped(count) : "",
                                 count > 0 ? console::grouped(change.to_sign_off()) : ""};
  const auto& p = most ? most->parts : publish::ChangeParts{};
  for (const double part : {most ? most->move : 0, p.level, p.skew, p.curvature, p.rest})
    cells.push_back(most ? points(part) : "");
  table.add(std::move(cells));
}

std::string listed(const char* what, const std::vector<quotes::Instant>& expiries,
                   const quotes::Clock& clock) {
  std::string text;
  for (const auto expiry : expiries)
    text += (text.empty() ? "" : ", ") + quotes::format_instant(clock, expiry);
  return text.empty() ? "" : console::wrapped(fmt::format("{}: {}", what, text), 78, 2);
}

// Something a person has to look at.
bool notable(const UnderlyingChange& c) {
  return c.to_sign_off() > 0 || c.state != ChangeState::compared || !c.new_expiries.empty() ||
         !c.vanished_expiries.empty();
}

// Those to look at first, then by the size of the move.
std::vector<const UnderlyingChange*> by_concern(const std::vector<UnderlyingChange>& changes) {
  std::vector<const UnderlyingChange*> order;
  for (const auto& c : changes)
    if (!c.nodes.empty() || notable(c)) order.push_back(&c);
  const auto size = [](const UnderlyingChange* c) {
    const auto* most = c->largest();
    return most ? std::abs(most->move) : 0.0;
  };
  std::stable_sort(order.begin(), order.end(), [&](const auto* a, const auto* b) {
    return std::pair(!notable(*a), -size(a)) < std::pair(!notable(*b), -size(b));
  });
  return order;
}

void print_summary(const Compared& compared) {
  constexpr std::size_t kMostRows = 40;
  fmt::print(stderr, "night of {}\nagainst  {}; the largest move of each, in vol points\n\n",
             quotes::format_instant(compared.now.clock, compared.now.instant),
             quotes::format_instant(compared.before.clock, compared.before.instant));
  console::Table table({"underlying", "state", ">nodes", ">sign off", ">move", ">level", ">skew",
                        ">curv.", ">rest"});
  const auto order = by_concern(compared.changes);
  for (std::size_t i = 0; i < std::min(order.size(), kMostRows); ++i) {
    add_row(table, *order[i]);
    const auto& clock = compared.now.clock;
    table.remark(listed("new expiry", order[i]->new_expiries, clock) +
                 listed("vanished expiry", order[i]->vanished_expiries, clock));
  }
  if (!order.empty()) fmt::print(stderr, "{}", table.text());
  if (order.size() > kMostRows)
    fmt::print(stderr, "and {} more, on standard output\n",
               console::grouped(static_cast<std::int64_t>(order.size() - kMostRows)));
}

int compare(const CompareArguments& args) {
  if (!(args.tolerance >= 0) || !std::isfinite(args.tolerance))
    return console::report({Fault::usage, "", "--tolerance must be a number > 0"});
  if (is_folder(args.before) != is_folder(args.now))
    return console::report(
        {Fault::usage, "", "compare two run folders, or two surfaces: these are one of each"});
  const auto compared = is_folder(args.now) ? compare_folders(args) : compare_files(args);
  if (!compared) return console::report(compared.failure());
  fmt::print("{}", publish::kChangesHeader);
  bool any = false, flagged = false;
  for (const auto& change : compared->changes) {
    fmt::print("{}", publish::changes_lines(change, compared->axis, compared->now.clock));
    any = any || !change.nodes.empty();
    flagged = flagged || notable(change);
  }
  print_summary(*compared);
  if (!any) return console::kNotAllPublished;
  return flagged ? console::kFlagged : console::kDone;
}

}  // namespace

void add_compare(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("compare", "What moved from one night to another");
  auto args = std::make_shared<CompareArguments>();
  command->add_option("old", args->before, "Folder of the older run, or its surfaces/NAME.json")
      ->required();
  command->add_option("new", args->now, "The same of the newer one")->required();
  command
      ->add_option("--tolerance", args->tolerance,
                   "Move of a node that is to be signed off,\n"
                   "decimals of vol; without it that of the\n"
                   "newer run, or 0.03")
      ->option_text("VOL");
  command->footer(
      "Prints the lines of changes.csv on standard output, a table on standard error.\n\n"
      "Examples:\n"
      "  duskgrid compare marks/2031-03-14 marks/2031-03-17 > changes.csv\n"
      "  duskgrid compare old/QNOR.json new/QNOR.json --tolerance 0.01\n\n"
      "Exit status: 0 nothing to sign off or new or gone; 3 something; 4 nothing in\n"
      "common to compare; 64 usage; 65 not such a file; 66 no input; 70 internal.");
  command->callback([args, &status] { status = compare(*args); });
}

}  // namespace duskgrid::commands
