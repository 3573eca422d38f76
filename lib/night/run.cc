#include "night/run.h"

#include <fmt/format.h>
#include <sys/resource.h>
#include <tbb/global_control.h>
#include <tbb/parallel_for.h>
#include <tbb/parallel_for_each.h>

#include <algorithm>
#include <chrono>
#include <filesystem>
#include <mutex>
#include <numeric>
#include <optional>
#include <set>
#include <span>
#include <thread>

#include "night/carry.h"
#include "night/changes.h"
#include "night/previous.h"
#include "night/report_pages.h"
#include "publish/digest.h"
#include "publish/run_folder.h"
#include "publish/surface_json.h"
#include "publish/tables.h"
#include "publish/tables_parallel.h"
#include "publish/text.h"

namespace duskgrid::night {
namespace {

double cpu_seconds() {
  rusage usage{};
  getrusage(RUSAGE_SELF, &usage);
  const auto seconds = [](const timeval& t) {
    return static_cast<double>(t.tv_sec) + 1e-6 * static_cast<double>(t.tv_usec);
  };
  return seconds(usage.ru_utime) + seconds(usage.ru_stime);
}

std::int64_t peak_memory_bytes() {
  rusage usage{};
  getrusage(RUSAGE_SELF, &usage);
  return usage.ru_maxrss * std::int64_t{1024};
}

// Times stages and tells of them.
class Stages {
 public:
  explicit Stages(const Progress& progress) : progress_(progress) {}

  void begin(const std::string& stage) {
    end();
    name_ = stage;
    wall_ = std::chrono::steady_clock::now();
    cpu_ = cpu_seconds();
    tell(0, 0);
  }
  void tell(std::int64_t done, std::int64_t total) const {
    if (progress_) progress_(name_, done, total);
  }
  const std::vector<publish::StageTime>& end() {
    if (!name_.empty()) {
      const std::chrono::duration<double> wall = std::chrono::steady_clock::now() - wall_;
      times_.push_back({name_, wall.count(), cpu_seconds() - cpu_});
    }
    name_.clear();
    return times_;
  }

 private:
  const Progress& progress_;
  std::string name_;
  std::chrono::steady_clock::time_point wall_;
  double cpu_ = 0;
  std::vector<publish::StageTime> times_;
};

Result<std::vector<publish::InputRecord>> record_inputs(
    const std::vector<quotes::FileSummary>& files, const ResolvedNight& night) {
  std::vector<publish::InputRecord> inputs;
  for (const auto& file : files) inputs.push_back({file.file, file.sha256, file.bytes, file.rows});
  for (const auto& [file, rows] : night.dividend_rows) {
    auto digest = publish::digest_file(file);
    if (!digest) return digest.failure();
    inputs.push_back({file, digest->sha256, digest->bytes, rows});
  }
  return inputs;
}

// The sums, taken last, must be those of what was read. Quote files are the first of the inputs.
std::optional<Failure> changed_meanwhile(const std::vector<quotes::FileSummary>& files,
                                         const std::vector<publish::InputRecord>& inputs) {
  for (std::size_t i = 0; i < files.size(); ++i)
    if (files[i].bytes != inputs[i].bytes)
      return Failure{Fault::no_input, files[i].file, "changed while it was read; run again"};
  return std::nullopt;
}

std::vector<MarkedUnderlying> mark_all(quotes::QuoteTable& table, const NightConfig& config,
                                       const ResolvedNight& night, const Stages& stages,
                                       const std::stop_token& stop) {
  auto chains = quotes::group_chains(table);
  // A name seen only on rows that cannot be read is no underlying of the night.
  std::erase_if(chains, [](const quotes::Chain& chain) { return chain.slices.empty(); });
  std::vector<MarkedUnderlying> marked(chains.size());
  std::vector<std::size_t> order(chains.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  // The largest first, so that no thread is left with one at the end.
  std::stable_sort(order.begin(), order.end(),
                   [&](std::size_t a, std::size_t b) { return chains[a].read > chains[b].read; });
  std::mutex telling;
  std::int64_t done = 0;
  tbb::parallel_for_each(order.begin(), order.end(), [&](std::size_t i) {
    if (stop.stop_requested()) return;
    marked[i] = mark_underlying(table, chains[i], config, night);
    const std::lock_guard lock(telling);
    stages.tell(++done, static_cast<std::int64_t>(chains.size()));
  });
  return marked;
}

using publish::RunFile;
using publish::RunFolder;

void write_grid(RunFile& file, const std::vector<MarkedUnderlying>& marked, publish::Axis axis,
                const ResolvedNight& night) {
  constexpr std::size_t kAtATime = 16;
  file.write(publish::kGridHeader);
  publish::write_lines(file, marked.size(), kAtATime, night.as_of.clock,
                       [&](std::size_t first, std::size_t last, std::string& out, auto& instants) {
                         for (const auto& m : std::span(marked).subspan(first, last - first))
                           for (const auto& node : m.grid)
                             out += publish::grid_line(node, axis, m.record.name,
                                                       night.as_of.instant, instants);
                       });
}

void write_ledger(RunFile& file, const quotes::QuoteTable& table, const quotes::Clock& clock) {
  constexpr std::size_t kAtATime = 2048;
  file.write(publish::kLedgerHeader);
  publish::write_lines(file, table.quotes.size(), kAtATime, clock,
                       [&](std::size_t first, std::size_t last, std::string& out, auto& instants) {
                         for (std::size_t i = first; i < last; ++i)
                           out += publish::ledger_line(table.quotes[i], table, instants);
                       });
}

// Some surfaces are made into text at once, and their files written one after the other.
Result<bool> write_surfaces(RunFolder& folder, const std::vector<MarkedUnderlying>& marked,
                            const ResolvedNight& night) {
  constexpr std::size_t kAtATime = 256;
  for (std::size_t first = 0; first < marked.size(); first += kAtATime) {
    const auto some = std::span(marked).subspan(first, std::min(kAtATime, marked.size() - first));
    std::vector<std::string> texts(some.size());
    tbb::parallel_for(std::size_t{0}, some.size(), [&](std::size_t i) {
      if (some[i].surface) texts[i] = publish::surface_to_json({night.as_of, *some[i].surface});
    });
    for (std::size_t i = 0; i < some.size(); ++i) {
      if (!some[i].surface) continue;
      auto written =
          folder.add("surfaces/" + publish::encode_file_name(some[i].record.name) + ".json",
                     [&](RunFile& file) { file.write(texts[i]); });
      if (!written) return written;
    }
  }
  return true;
}

// Everything a run folder holds but run.json and timings.json.
Result<bool> write_tables(RunFolder& folder, const quotes::QuoteTable& table,
                          const std::vector<MarkedUnderlying>& marked, const NightConfig& config,
                          const ResolvedNight& night) {
  const auto& clock = night.as_of.clock;
  auto written = folder.add(
      "grid.csv", [&](RunFile& file) { write_grid(file, marked, config.grid.axis, night); });
  if (written)
    written = folder.add("ledger.csv", [&](RunFile& file) { write_ledger(file, table, clock); });
  if (written)
    written = folder.add("forwards.csv", [&](RunFile& file) {
      file.write(publish::kForwardsHeader);
      for (const auto& m : marked)
        for (const auto& row : m.forwards)
          file.write(publish::forwards_line(row, m.record.name, clock));
    });
  if (written)
    written = folder.add("financing.csv", [&](RunFile& file) {
      file.write(publish::kFinancingHeader);
      for (const auto& m : marked)
        for (const auto& row : m.financing)
          file.write(publish::financing_line(row, m.record.name, clock));
    });
  if (written)
    written = folder.add("violations.csv", [&](RunFile& file) {
      file.write(publish::kViolationsHeader);
      for (const auto& m : marked)
        for (const auto& violation : m.violations)
          file.write(publish::violations_line(violation, m.record.name, clock));
    });
  if (written)
    written = folder.add("expiries.csv", [&](RunFile& file) {
      file.write(publish::kExpiriesHeader);
      publish::InstantTexts instants(clock);
      for (const auto& m : marked)
        for (const auto& row : m.expiries)
          file.write(publish::expiries_line(row, m.record.name, instants));
    });
  return written ? write_surfaces(folder, marked, night) : written;
}

// Names configured that no file has: a slip of the pen, or a name that is gone.
void remark_unmatched(const NightConfig& config, const ResolvedNight& night,
                      const quotes::QuoteTable& table, std::vector<std::string>& remarks) {
  const std::set<std::string_view> known(table.underlyings.begin(), table.underlyings.end());
  const auto near = [&](const std::string& name) {
    const auto found = nearest(name, table.underlyings);
    return found.empty() ? "" : "; the nearest name is " + found;
  };
  for (const auto& [name, facts] : config.underlyings)
    if (!known.contains(name)) remarks.push_back("no file has the underlying " + name + near(name));
  // A file of dividends may know the whole market: the first few names do.
  std::vector<std::string> idle;
  for (const auto& [name, dividends] : night.dividends)
    if (!known.contains(name) && !config.underlyings.contains(name)) idle.push_back(name);
  constexpr std::size_t kTold = 3;
  for (std::size_t i = 0; i < std::min(idle.size(), kTold); ++i)
    remarks.push_back("no file has " + idle[i] + ", which has dividends" + near(idle[i]));
  if (idle.size() > kTold)
    remarks.push_back(fmt::format("nor {} more names that have dividends", idle.size() - kTold));
}

// A style that nobody says moves every mark of an American name, so it is said.
void remark_exercise(const std::vector<quotes::FileSummary>& files,
                     std::vector<std::string>& remarks) {
  std::vector<std::string> silent;
  for (const auto& file : files)
    if (file.rows > 0 && !file.exercise && file.columns.find(quotes::Field::exercise) < 0)
      silent.push_back(file.file);
  if (silent.empty()) return;
  remarks.push_back(
      fmt::format("{}{}: exercise style is stated nowhere and taken as european", silent[0],
                  silent.size() > 1 ? fmt::format(" and {} more", silent.size() - 1) : ""));
}

Failure stopped() { return {Fault::stopped, "", "stopped before anything was written"}; }

// Carried ones aside, which are no marks of tonight.
bool any_surface(const std::vector<MarkedUnderlying>& marked) {
  return std::any_of(marked.begin(), marked.end(), [](const MarkedUnderlying& m) {
    return m.surface && m.record.status != publish::Status::carried;
  });
}

publish::PreviousRecord record_of(const publish::PastRun& run) {
  return {std::filesystem::path(run.folder).filename().string(),
          quotes::format_instant(run.as_of.clock, run.as_of.instant), run.sha256};
}

// The history is beside the night, not part of it: without it the night stands.
void keep_history(const RunOptions& options, const NightConfig& config, const ResolvedNight& night,
                  NightOutcome& outcome) {
  const bool named_by_date = std::filesystem::path(outcome.folder).filename() ==
                             quotes::format_date(night.as_of.clock, night.as_of.instant);
  if (!named_by_date) return;
  const auto kept =
      write_history(options.out, outcome.underlyings, config, night, outcome.record.version);
  if (!kept)
    outcome.remarks.push_back(
        "the history lacks this night, which is published all the same; run "
        "it again to add it: " +
        kept.failure().text());
}

quotes::LedgerCounts count_rows(const quotes::QuoteTable& table) {
  quotes::LedgerCounts counts;
  for (const auto& q : table.quotes) counts.add(q.reason);
  return counts;
}

}  // namespace

Result<NightOutcome> run_night(const NightConfig& config, const RunOptions& options) {
  const auto night = resolve(config);
  if (!night) return night.failure();
  const int machine = static_cast<int>(std::max(1u, std::thread::hardware_concurrency()));
  const int threads = options.threads > 0 ? options.threads : machine;
  const tbb::global_control limit(tbb::global_control::max_allowed_parallelism,
                                  static_cast<std::size_t>(threads));
  Stages stages(options.progress);

  stages.begin("read");
  auto loaded = quotes::load_quotes(sources_of(config), night->times);
  if (!loaded) return loaded.failure();
  auto& table = loaded->table;
  auto inputs = record_inputs(loaded->files, *night);
  if (!inputs) return inputs.failure();
  if (auto changed = changed_meanwhile(loaded->files, *inputs)) return *changed;
  stages.end();  // waiting for another run is nobody's work
  auto created =
      RunFolder::create(options.out, quotes::format_date(night->as_of.clock, night->as_of.instant),
                        {options.wait_seconds, options.stop});
  if (!created) return created.failure();
  auto& folder = **created;
  if (options.stop.stop_requested()) return stopped();
  stages.begin("clean");
  quotes::clean_quotes(table, night->as_of.instant, config.clean);
  stages.begin("mark");
  auto marked = mark_all(table, config, *night, stages, options.stop);

  if (options.stop.stop_requested()) return stopped();
  stages.begin("carry");
  NightOutcome outcome;
  const auto previous = previous_night(options.out, *night, outcome.remarks);
  if (previous) carry_all(marked, *previous, config, *night);

  stages.begin("publish");
  outcome.record = {DUSKGRID_VERSION,
                    night->as_of,
                    config_to_json(config),
                    std::move(*inputs),
                    {},
                    count_rows(table),
                    {}};
  if (!outcome.record.rows.adds_up())
    return Failure{Fault::no_convergence, "ledger", "the counts do not add up to the rows read"};
  if (previous) outcome.record.previous = record_of(*previous);
  if (auto written = write_tables(folder, table, marked, config, *night); !written)
    return written.failure();
  const auto date = quotes::format_date(night->as_of.clock, night->as_of.instant);
  const ComparedNights nights{previous ? &*previous : nullptr,
                              past_terms(options.out, date, config.compare, outcome.remarks)};
  ReportChanges report(marked, config, *night);
  const auto taker = previous ? report.taker(previous->as_of.instant) : SeenChange{};
  if (auto changes = write_changes(folder, marked, nights, config, *night, taker); !changes)
    return changes.failure();
  for (const auto& m : marked) outcome.record.underlyings.push_back(m.record);
  remark_unmatched(config, *night, table, outcome.remarks);
  remark_exercise(loaded->files, outcome.remarks);
  stages.begin("report");
  if (auto written = write_report(folder, table, marked, report.extras(), config, *night,
                                  outcome.record, outcome.remarks);
      !written)
    return written.failure();
  outcome.record.outputs = folder.digests();
  auto written = folder.add(
      "run.json", [&](RunFile& file) { file.write(publish::run_to_json(outcome.record)); });
  const publish::Timings timings{stages.end(), threads, peak_memory_bytes()};
  if (written)
    written = folder.add("timings.json",
                         [&](RunFile& file) { file.write(publish::timings_to_json(timings)); });
  if (written) written = folder.commit(any_surface(marked));
  if (!written) return written.failure();
  outcome.folder = folder.final_path();
  outcome.run_sha256 = folder.digests().at("run.json");
  if (folder.replaced()) outcome.remarks.push_back("replaced the earlier run of that date");
  outcome.remarks.insert(outcome.remarks.end(), folder.remarks().begin(), folder.remarks().end());
  for (const auto& file : loaded->files)
    if (file.rows == 0) outcome.remarks.push_back(file.file + " holds no rows");
  for (const auto& [file, rows] : night->dividend_rows)
    if (rows == 0) outcome.remarks.push_back(file + " holds no rows");
  for (auto& m : marked) m.grid.clear();
  outcome.underlyings = std::move(marked);
  outcome.files = std::move(loaded->files);
  keep_history(options, config, *night, outcome);
  return outcome;
}

}  // namespace duskgrid::night
