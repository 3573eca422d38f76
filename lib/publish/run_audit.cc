#include "publish/run_audit.h"

#include <fmt/format.h>
#include <sys/stat.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <map>
#include <nlohmann/json.hpp>
#include <optional>
#include <set>
#include <span>
#include <string_view>
#include <system_error>
#include <utility>

#include "arbitrage/certificate.h"
#include "publish/digest.h"
#include "publish/grid.h"
#include "publish/surface_json.h"
#include "publish/table_file.h"
#include "publish/text.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

constexpr const char* kAccount = "run.json";
constexpr const char* kTimings = "timings.json";

// Strikes and volatilities within this, relative, are those of the surface: another machine's
// logarithm may differ in its last digit (2e-16), and a steep smile makes of it some hundred times
// as much.
constexpr double kSameNumber = 1e-12;

std::string content_of(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

// Faults of one kind, of which there may be a million: the first and how many.
class Tally {
 public:
  void add(std::int64_t line, const std::string& what) {
    if (count_++ == 0) first_ = fmt::format("line {}: {}", line, what);
  }
  std::optional<std::string> told() const {
    if (count_ == 0) return std::nullopt;
    return count_ == 1 ? first_ : fmt::format("{}, and {} more lines", first_, count_ - 1);
  }

 private:
  std::int64_t count_ = 0;
  std::string first_;
};

double number_of(std::string_view cell) {
  double value = 0;
  const char* end = cell.data() + cell.size();
  const auto [stop, error] = std::from_chars(cell.data(), end, value);
  return error == std::errc{} && stop == end ? value : quotes::kAbsent;
}

bool near(double a, double b) { return std::abs(a - b) <= kSameNumber * std::abs(b); }

class Audit {
 public:
  Audit(std::string folder, RunAudit& audit)
      : folder_(std::move(folder)), record_(audit.record), audit_(audit) {
    for (const auto& u : record_.underlyings) by_name_[u.name] = &u;
  }

  void files();
  void counts();
  void ledger();
  void violations();
  void surfaces();
  void grid();
  void inputs();

 private:
  struct Seen {
    StoredSurface stored;
    std::set<double> times;  // listed expiries with nodes in the grid
  };
  void find(const std::string& file, const std::string& what) {
    audit_.findings.push_back({file, what});
  }
  void find(const std::string& file, const Tally& tally) {
    if (const auto told = tally.told()) find(file, *told);
  }
  void expect(const std::string& file, const char* what, std::int64_t is, std::int64_t said) {
    if (is != said) find(file, fmt::format("{} {}, run.json says {}", is, what, said));
  }
  std::string path(const std::string& file) const { return folder_ + "/" + file; }
  std::set<std::string> plain_files();
  // False, and a finding, where the table cannot be read; nothing where it is missing, which is one
  // already.
  void table(const std::string& file, const std::vector<std::string_view>& columns,
             const TakeRow& take);
  void surface(const std::string& file, const UnderlyingRecord& said);
  void node(std::int64_t line, std::span<const std::string_view> cells);
  std::string wrong_time(const Seen& seen, double t, std::span<const std::string_view> cells);
  void input(const InputRecord& said);

  std::string folder_;
  const RunRecord& record_;
  RunAudit& audit_;
  std::map<std::string, const UnderlyingRecord*> by_name_;
  std::set<std::string> there_;
  std::map<std::string, Seen> surfaces_;
  std::string axis_, as_of_;
  Tally wrong_nodes_;
};

// Links are not followed: what they lead to is not in the folder.
std::set<std::string> Audit::plain_files() {
  using Walk = fs::recursive_directory_iterator;
  std::set<std::string> files;
  std::error_code error;
  for (Walk at(folder_, error), end; !error && at != end; at.increment(error)) {
    const auto status = at->symlink_status(error);
    const std::string name = at->path().lexically_relative(folder_);
    if (fs::is_regular_file(status))
      files.insert(name);
    else if (!fs::is_directory(status))
      find(name, "is neither a file nor a folder");
  }
  if (error) find("", "cannot be listed: " + error.message());
  return files;
}

void Audit::files() {
  there_ = plain_files();
  for (const auto& [file, sha256] : record_.outputs) {
    if (there_.count(file) == 0) {
      find(file, "is missing");
      continue;
    }
    const auto sum = digest_file(path(file));
    if (!sum)
      find(file, sum.failure().detail);
    else if (sum->sha256 != sha256)
      find(file, "has another SHA-256 than run.json says: " + sum->sha256);
    else
      ++audit_.files;
  }
  for (const auto& file : there_)
    if (record_.outputs.count(file) == 0 && file != kAccount && file != kTimings)
      find(file, "is not in run.json");
  if (there_.count(kTimings) == 0) find(kTimings, "is missing");
}

void Audit::counts() {
  quotes::LedgerCounts by_state;
  for (const auto& entry : quotes::reasons()) {
    const auto n = record_.rows.by_reason[static_cast<std::size_t>(entry.reason)];
    (entry.state == quotes::State::spare ? by_state.spare : by_state.dropped) +=
        entry.state == quotes::State::used ? 0 : n;
  }
  if (!record_.rows.adds_up() || by_state.spare != record_.rows.spare ||
      by_state.dropped != record_.rows.dropped)
    find(kAccount, "its rows and reasons do not add up");
  std::int64_t used = 0;
  for (const auto& u : record_.underlyings) {
    used += u.used;
    if (u.inside > u.used) find(kAccount, u.name + " has more quotes inside than used");
    if ((u.status == Status::refused) != (u.slices == 0))
      find(kAccount, fmt::format("{} is {} with {} slices", u.name, word(u.status), u.slices));
  }
  expect(kAccount, "used quotes of the underlyings", used, record_.rows.used);
}

void Audit::table(const std::string& file, const std::vector<std::string_view>& columns,
                  const TakeRow& take) {
  if (there_.count(file) == 0) {
    if (record_.outputs.count(file) == 0) find(file, "is missing");
    return;
  }
  if (auto read = read_table(path(file), columns, take); !read) find(file, read.failure().detail);
}

void Audit::ledger() {
  constexpr const char* kFile = "ledger.csv";
  std::map<std::string, std::int64_t, std::less<>> states, reasons, used;
  table(kFile, {"underlying", "state", "reason"}, [&](std::int64_t, auto cells) {
    ++audit_.rows;
    ++states[std::string(cells[1])];
    if (!cells[2].empty()) ++reasons[std::string(cells[2])];
    if (cells[1] == "used") ++used[unguarded(cells[0])];
  });
  expect(kFile, "contracts", audit_.rows, record_.rows.read);
  for (const auto& [state, said] : {std::pair("used", record_.rows.used),
                                    {"spare", record_.rows.spare},
                                    {"dropped", record_.rows.dropped}})
    expect(kFile, state, states[state], said);
  for (const auto& entry : quotes::reasons())
    if (!entry.word.empty())
      expect(kFile, std::string(entry.word).c_str(), reasons[std::string(entry.word)],
             record_.rows.by_reason[static_cast<std::size_t>(entry.reason)]);
  for (const auto& u : record_.underlyings)
    expect(kFile, ("used quotes of " + u.name).c_str(), used[u.name], u.used);
}

void Audit::violations() {
  constexpr const char* kFile = "violations.csv";
  std::map<std::string, std::int64_t> lines;
  table(kFile, {"underlying"}, [&](std::int64_t, auto cells) { ++lines[unguarded(cells[0])]; });
  for (const auto& u : record_.underlyings)
    expect(kFile, ("violations of " + u.name).c_str(), lines[u.name], u.violations);
  for (const auto& [name, n] : lines)
    if (by_name_.count(name) == 0) find(kFile, name + " is not in run.json");
}

void Audit::surfaces() {
  for (const auto& u : record_.underlyings) {
    const std::string file = "surfaces/" + encode_file_name(u.name) + ".json";
    const bool listed = record_.outputs.count(file) > 0;
    if (listed != (u.slices > 0))
      find(kAccount, fmt::format("{} has {} slices, and {} is {}", u.name, u.slices, file,
                                 listed ? "there" : "not there"));
    if (listed && there_.count(file) > 0) surface(file, u);
  }
  for (const auto& [file, sha256] : record_.outputs) {
    if (!file.starts_with("surfaces/") || !file.ends_with(".json")) continue;
    const auto name = decode_file_name(std::string_view(file).substr(9, file.size() - 14));
    if (!name || by_name_.count(*name) == 0) find(file, "is of no underlying in run.json");
  }
}

void Audit::surface(const std::string& file, const UnderlyingRecord& said) {
  auto stored = surface_from_json(content_of(path(file)), file);
  if (!stored) return find(file, stored.failure().detail);
  const auto& clock = stored->as_of.clock;
  if (stored->surface.underlying != said.name)
    find(file, "is the surface of " + stored->surface.underlying);
  if (stored->as_of.instant != record_.as_of.instant && said.status != Status::carried)
    find(file, "is of another night: " + quotes::format_instant(clock, stored->as_of.instant));
  expect(file, "expiries", std::ssize(stored->surface.slices), said.slices);
  ++audit_.surfaces;
  const bool proved = arbitrage::certify(stored->surface).certified;
  audit_.proved += proved ? 1 : 0;
  if (said.certified && !proved)
    find(file, "is not proved free of arbitrage, though said to be certified");
  if (!said.certified)
    audit_.notes.push_back(said.name + " is not certified, as run.json says" +
                           (proved ? "; a proof was found now" : ""));
  surfaces_.emplace(said.name, Seen{std::move(*stored), {}});
}

constexpr std::array<std::string_view, 10> kNodeColumns{
    "as_of",   "underlying",      "expiry", "tenor", "year_fraction",
    "forward", "discount_factor", "axis",   "point", "strike"};

// What is wrong with the time of a node: its expiry, forward or discount factor; or empty.
std::string Audit::wrong_time(const Seen& seen, double t, std::span<const std::string_view> cells) {
  const auto& surface = seen.stored.surface;
  surface::Carried due{};
  if (cells[3].empty()) {
    const auto slice = std::find_if(surface.slices.begin(), surface.slices.end(),
                                    [&](const surface::Slice& s) { return s.year_fraction == t; });
    if (slice == surface.slices.end()) return "no expiry of the surface is at this year_fraction";
    if (quotes::format_instant(seen.stored.as_of.clock, slice->expiry) != cells[2])
      return "expiry is not that of the surface";
    due = {slice->forward, slice->discount_factor};
  } else {
    due = surface::carried_at(surface, t);
  }
  return near(number_of(cells[5]), due.forward) && near(number_of(cells[6]), due.discount_factor)
             ? ""
             : "forward or discount_factor is not that of the surface";
}

void Audit::node(std::int64_t line, std::span<const std::string_view> cells) {
  const auto found = surfaces_.find(unguarded(cells[1]));
  if (found == surfaces_.end()) return wrong_nodes_.add(line, "its underlying has no surface");
  auto& seen = found->second;
  const double t = number_of(cells[4]), forward = number_of(cells[5]), point = number_of(cells[8]);
  const double strike = number_of(cells[9]), vol = number_of(cells[10]);
  const auto axis = parse_axis(cells[7]);
  if (cells[0] != as_of_ || cells[7] != axis_ || !axis)
    return wrong_nodes_.add(line, "as_of or axis is not that of run.json");
  if (!(t > 0) || !(forward > 0) || !std::isfinite(point) || !std::isfinite(forward * t))
    return wrong_nodes_.add(line, "year_fraction, forward or point is no such number");
  if (cells[3].empty()) seen.times.insert(t);
  if (by_name_.at(found->first)->status == Status::carried) return;
  if (auto wrong = wrong_time(seen, t, cells); !wrong.empty()) return wrong_nodes_.add(line, wrong);
  const auto due = node_at(seen.stored.surface, t, forward, *axis, point);
  if (!due) return wrong_nodes_.add(line, "the surface has no such node");
  if (!near(strike, due->strike) || !near(vol, due->vol))
    return wrong_nodes_.add(line, fmt::format("strike {} and vol {}, the surface gives {} and {}",
                                              cells[9], cells[10], due->strike, due->vol));
  ++audit_.same_nodes;
}

void Audit::grid() {
  constexpr const char* kFile = "grid.csv";
  as_of_ = quotes::format_instant(record_.as_of.clock, record_.as_of.instant);
  const auto configuration = nlohmann::json::parse(record_.configuration, nullptr, false);
  const nlohmann::json::json_pointer axis("/grid/axis");
  if (configuration.contains(axis) && configuration.at(axis).is_string())
    axis_ = configuration.at(axis).get<std::string>();
  std::vector<std::string_view> columns(kNodeColumns.begin(), kNodeColumns.end());
  columns.push_back("vol");
  table(kFile, columns, [&](std::int64_t line, auto cells) {
    ++audit_.nodes;
    node(line, cells);
  });
  find(kFile, wrong_nodes_);
  for (const auto& [name, seen] : surfaces_) {
    expect(kFile, ("expiries of " + name).c_str(), std::ssize(seen.times),
           by_name_.at(name)->slices);
    if (by_name_.at(name)->status == Status::carried)
      audit_.notes.push_back(name + " is carried: its nodes are not asked again");
  }
}

void Audit::input(const InputRecord& said) {
  struct stat now {};
  const auto note = [&](const std::string& what) {
    audit_.notes.push_back(said.file + " " + what);
  };
  if (::stat(said.file.c_str(), &now) != 0) return note("is no longer there to be compared");
  // A pipe would wait for ever.
  if (!S_ISREG(now.st_mode)) return note("is no file to be compared");
  const auto sum = digest_file(said.file);
  if (!sum) return note(sum.failure().detail);
  if (sum->sha256 != said.sha256 || sum->bytes != said.bytes)
    return note("is not what was read: it has SHA-256 " + sum->sha256);
  ++audit_.inputs;
}

void Audit::inputs() {
  for (const auto& said : record_.inputs) input(said);
}

// The folder itself, whatever its name leads to at another time.
std::pair<dev_t, ino_t> identity(const std::string& folder) {
  struct stat now {};
  if (::stat(folder.c_str(), &now) != 0) return {};
  return {now.st_dev, now.st_ino};
}

}  // namespace

Result<RunAudit> audit_run(const std::string& folder) {
  const auto before = identity(folder);
  const std::string account = folder + "/" + kAccount;
  std::error_code error;
  if (!fs::is_regular_file(fs::symlink_status(account, error)))
    return Failure{Fault::no_input, folder,
                   "holds no run.json; name the folder of one night, such as out/latest"};
  const auto sum = digest_file(account);
  if (!sum) return sum.failure();
  auto record = run_from_json(content_of(account), account);
  if (!record) return record.failure();
  RunAudit audit;
  audit.record = std::move(*record);
  audit.run_sha256 = sum->sha256;
  Audit work(folder, audit);
  work.files();
  work.counts();
  work.ledger();
  work.violations();
  work.surfaces();
  work.grid();
  work.inputs();
  if (identity(folder) != before)
    return Failure{Fault::no_input, folder, "was replaced while it was checked; check again"};
  return audit;
}

}  // namespace duskgrid::publish
