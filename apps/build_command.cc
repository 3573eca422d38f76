#include <fmt/format.h>

#include <algorithm>
#include <charconv>
#include <cmath>
#include <csignal>
#include <nlohmann/json.hpp>

#include "commands.h"
#include "console.h"
#include "input_arguments.h"
#include "night/run.h"
#include "stop_signals.h"

namespace duskgrid::commands {
namespace {

using console::grouped;
using night::MarkedUnderlying;
using publish::Status;

struct BuildArguments {
  InputArguments input;
  std::string out = "out";
  std::vector<std::string> spots;
  int threads = 0;
  double wait_seconds = 0;
  bool quiet = false;
  bool json = false;
  bool slices = false;
  bool list_options = false;
};

// "21.4" for every underlying without its own in the configuration, or "NAME=21.4".
Result<bool> take_spots(const BuildArguments& args, night::NightConfig& config) {
  for (const auto& text : args.spots) {
    const auto equals = text.rfind('=');
    const std::string number = equals == std::string::npos ? text : text.substr(equals + 1);
    double spot = 0;
    const char* end = number.data() + number.size();
    const auto [stop, error] = std::from_chars(number.data(), end, spot);
    if (error != std::errc{} || stop != end || !(spot > 0) || !std::isfinite(spot))
      return Failure{Fault::usage, "", "--spot = " + text + ", must be a price or NAME=PRICE"};
    if (equals == std::string::npos)
      config.spot = spot;
    else
      config.underlyings[text.substr(0, equals)].spot = spot;
  }
  return true;
}

std::string percent(std::int64_t part, std::int64_t whole) {
  return whole > 0 ? fmt::format("{:.1f} %",
                                 100.0 * static_cast<double>(part) / static_cast<double>(whole))
                   : "";
}

// Those worth a look first: refused, carried, flagged, published; by name within.
std::vector<const MarkedUnderlying*> by_concern(const std::vector<MarkedUnderlying>& all) {
  std::vector<const MarkedUnderlying*> order;
  for (const auto& m : all) order.push_back(&m);
  std::stable_sort(order.begin(), order.end(), [](const auto* a, const auto* b) {
    return a->record.status > b->record.status;
  });
  return order;
}

console::Colour colour_of(Status status) {
  switch (status) {
    case Status::published: return console::Colour::good;
    case Status::refused: return console::Colour::bad;
    default: return console::Colour::look;
  }
}

void print_underlyings(const night::NightOutcome& outcome) {
  constexpr std::size_t kMostRows = 40;
  console::Table table(
      {"underlying", "status", ">expiries", ">used", ">inside", ">violations", "certified"});
  const auto order = by_concern(outcome.underlyings);
  for (std::size_t i = 0; i < std::min(order.size(), kMostRows); ++i) {
    const auto& r = order[i]->record;
    table.add({console::shortened(r.name, 24), std::string(publish::word(r.status)),
               grouped(r.slices), grouped(r.used), percent(r.inside, r.used), grouped(r.violations),
               r.slices == 0 ? ""
               : r.certified ? "yes"
                             : "no"});
    table.tint(1, colour_of(r.status));
    table.remark(console::wrapped(r.message, 78, 2));
  }
  if (!order.empty()) fmt::print(stderr, "{}", table.text());
  if (order.size() > kMostRows)
    fmt::print(stderr, "and {} more, in run.json\n",
               grouped(static_cast<std::int64_t>(order.size() - kMostRows)));
}

void print_slices(const night::NightOutcome& outcome) {
  console::Table table({"underlying", "expiry", ">used", ">inside", ">rms, vol points"});
  for (const auto& m : outcome.underlyings)
    for (const auto& q : m.quality)
      table.add({console::shortened(m.record.name, 24),
                 quotes::format_instant(outcome.record.as_of.clock, q.expiry), grouped(q.used),
                 percent(q.inside, q.used), fmt::format("{:.3f}", 100 * q.rms_vol)});
  fmt::print(stderr, "\n{}", table.text());
}

void print_rows(const quotes::LedgerCounts& rows) {
  fmt::print(stderr, "\n{} contracts read = {} used + {} spare + {} dropped\n", grouped(rows.read),
             grouped(rows.used), grouped(rows.spare), grouped(rows.dropped));
  std::string reasons;
  for (const auto& entry : quotes::reasons())
    if (const auto n = rows.by_reason[static_cast<std::size_t>(entry.reason)];
        n > 0 && !entry.word.empty())
      reasons += fmt::format("{}{} {}", reasons.empty() ? "" : ", ", entry.word, grouped(n));
  fmt::print(stderr, "{}", console::wrapped(reasons, 78, 2));
}

void print_summary(const night::NightOutcome& outcome, bool slices) {
  const auto& record = outcome.record;
  fmt::print(stderr, "night of {}\n\n",
             quotes::format_instant(record.as_of.clock, record.as_of.instant));
  print_underlyings(outcome);
  if (slices) print_slices(outcome);
  print_rows(record.rows);
  for (const auto& remark : outcome.remarks) fmt::print(stderr, "note: {}\n", remark);
  fmt::print(stderr, "run.json has SHA-256 {}\n", outcome.run_sha256);
}

int status_of(const night::NightOutcome& outcome) {
  Status worst = Status::published;
  for (const auto& u : outcome.record.underlyings) worst = std::max(worst, u.status);
  const bool empty_file = std::any_of(outcome.files.begin(), outcome.files.end(),
                                      [](const auto& f) { return f.rows == 0; });
  // Where all is carried nothing of tonight has been published.
  const bool any_marked =
      std::any_of(outcome.record.underlyings.begin(), outcome.record.underlyings.end(),
                  [](const auto& u) { return u.status < Status::carried; });
  if (worst == Status::refused || !any_marked || empty_file) return console::kNotAllPublished;
  return worst == Status::published ? console::kDone : console::kFlagged;
}

// One line for the program that started this one.
void print_json(const night::NightOutcome& outcome, int status) {
  using nlohmann::ordered_json;
  const auto& record = outcome.record;
  ordered_json statuses = ordered_json::object(), reasons = ordered_json::object();
  for (const auto s : {Status::published, Status::flagged, Status::carried, Status::refused})
    statuses[std::string(publish::word(s))] =
        std::count_if(record.underlyings.begin(), record.underlyings.end(),
                      [&](const auto& u) { return u.status == s; });
  for (const auto& entry : quotes::reasons())
    if (const auto n = record.rows.by_reason[static_cast<std::size_t>(entry.reason)];
        n > 0 && !entry.word.empty())
      reasons[std::string(entry.word)] = n;
  ordered_json out;
  out["folder"] = outcome.folder;
  out["as_of"] = quotes::format_instant(record.as_of.clock, record.as_of.instant);
  out["exit_status"] = status;
  out["underlyings"] = statuses;
  out["rows"] = {{"read", record.rows.read},
                 {"used", record.rows.used},
                 {"spare", record.rows.spare},
                 {"dropped", record.rows.dropped}};
  out["reasons"] = reasons;
  out["remarks"] = outcome.remarks;
  fmt::print("{}\n", out.dump(-1, ' ', false, ordered_json::error_handler_t::replace));
}

void print_options() {
  std::string table = "-";
  for (const auto& option : night::options()) {
    if (option.table != table) {
      table = option.table;
      fmt::print("{}\n", table.empty() ? "at the top of the file" : "[" + table + "]");
    }
    fmt::print("  {} = {}   ({})\n{}", option.key, option.fallback, option.range,
               console::wrapped(option.meaning, 78, 6));
  }
}

int build(const BuildArguments& args) {
  StopSignals signals;
  auto config = args.input.config();
  if (!config) return console::report(config.failure());
  if (auto taken = take_spots(args, *config); !taken) return console::report(taken.failure());
  console::ProgressLine line(args.quiet);
  const night::Progress progress = [&](std::string_view stage, std::int64_t done,
                                       std::int64_t total) {
    if (stage == "publish") signals.writing();
    line.show(stage, done, total);
  };
  // Past a limit on file sizes a write fails, as on a full disk; by default the process would die.
  std::signal(SIGXFSZ, SIG_IGN);
  auto outcome = night::run_night(
      *config, {args.out, args.threads, progress, args.wait_seconds, signals.token()});
  line.clear();
  if (!outcome)
    return outcome.failure().fault == Fault::stopped ? signals.report(outcome.failure())
                                                     : console::report(outcome.failure());
  if (!args.quiet) print_summary(*outcome, args.slices);
  const int status = status_of(*outcome);
  if (args.json)
    print_json(*outcome, status);
  else
    fmt::print("{}\n", outcome->folder);
  return status;
}

}  // namespace

void add_build(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("build", "Turn a night's quotes into grids");
  auto args = std::make_shared<BuildArguments>();
  args->input.add_to(*command);
  command->add_option("--out", args->out, "Folder that gets a folder a night")
      ->capture_default_str();
  // One value each time: what follows may be a file.
  command
      ->add_option("--spot", args->spots,
                   "Price of the underlying, or NAME=PRICE,\n"
                   "where no file says it; again for each name")
      ->allow_extra_args(false)
      ->option_text("PRICE");
  constexpr double kLongestWait = 7 * 86400;
  command
      ->add_option("--wait", args->wait_seconds,
                   "How long to wait for another run that writes\n"
                   "to the same folder, in seconds")
      ->check(CLI::Range(0.0, kLongestWait))
      ->capture_default_str()
      ->option_text("SECONDS");
  command->add_option("--threads", args->threads, "Threads; 0 takes all the machine has")
      ->check(CLI::Range(0, 1024))
      ->capture_default_str();
  command->add_flag("--slices", args->slices, "Show how well each expiry is met");
  command->add_flag("--json", args->json,
                    "Print one line of JSON in place of the\n"
                    "folder: folder, exit status, counts");
  command->add_flag("--quiet", args->quiet, "No progress and no summary");
  command->add_flag_callback(
      "--options",
      [] {
        print_options();
        throw CLI::Success();
      },
      "List the keys of a configuration and stop");
  command->footer(
      "Prints the folder published on standard output, the summary on standard error.\n\n"
      "Examples:\n"
      "  duskgrid build quotes.csv --as-of 2031-03-14T16:00:00-04:00 --out marks\n"
      "  duskgrid build NIGHT.toml --out marks\n"
      "  duskgrid build habits.toml 'feed/*.csv.gz' --as-of 2031-03-14\n\n"
      "Exit status: 0 published; 3 published, some flagged or carried; 4 some or\n"
      "all not published; 64 usage; 65 not such a CSV; 66 no input; 70 internal;\n"
      "73 cannot create output; 78 configuration; 129, 130, 143 stopped by SIGHUP,\n"
      "SIGINT, SIGTERM: nothing is published then.");
  command->callback([args, &status] { status = build(*args); });
}

}  // namespace duskgrid::commands
