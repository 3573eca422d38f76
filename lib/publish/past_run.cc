#include "publish/past_run.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <exception>
#include <filesystem>
#include <fstream>
#include <functional>
#include <iterator>
#include <nlohmann/json.hpp>
#include <utility>

#include "market/dates.h"
#include "publish/digest.h"
#include "publish/text.h"
#include "quotes/rows.h"

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;
using nlohmann::json;

Result<std::string> read_text(const std::string& path) {
  std::error_code error;
  std::ifstream file(path, std::ios::binary);
  if (!file || fs::is_directory(path, error))
    return Failure{Fault::no_input, path, "is missing or cannot be read"};
  std::string text{std::istreambuf_iterator<char>(file), {}};
  if (file.bad()) return Failure{Fault::no_input, path, "cannot be read to its end"};
  return text;
}

Status status_of(const std::string& text) {
  for (const auto status : {Status::published, Status::flagged, Status::carried})
    if (word(status) == text) return status;
  return Status::refused;
}

std::string text_or_empty(const json& in, const char* key) {
  const auto found = in.find(key);
  return found != in.end() && found->is_string() ? found->get<std::string>() : "";
}

UnderlyingRecord record_of(const std::string& name, const json& in) {
  UnderlyingRecord out;
  out.name = name;
  out.status = status_of(in.at("status").get<std::string>());
  out.certified = in.at("certified").get<bool>();
  out.carried_from = text_or_empty(in, "carried_from");
  out.message = text_or_empty(in, "message");
  return out;
}

// A grid that cannot be had is that of the defaults: nodes are a matter of taste.
GridOptions grid_of(const json& configuration) {
  const GridOptions fallback;
  try {
    const json& in = configuration.at("grid");
    GridOptions grid;
    grid.axis = parse_axis(in.at("axis").get<std::string>()).value();
    grid.points = in.at("points").get<std::vector<double>>();
    for (const auto& text : in.at("tenors")) {
      grid.tenor_words.push_back(text.get<std::string>());
      grid.tenors.push_back(market::parse_tenor(grid.tenor_words.back()).value());
    }
    // Listed strikes are not in the folder's account.
    if (grid.problem() || (grid.axis == Axis::strike && grid.points.empty())) return fallback;
    return grid;
  } catch (const std::exception&) {
    return fallback;
  }
}

CompareOptions compare_of(const json& configuration) {
  try {
    const json& in = configuration.at("compare");
    CompareOptions out;
    out.tolerance = in.at("tolerance").get<double>();
    out.times_typical = in.at("times_typical").get<double>();
    out.deviations = in.at("deviations").get<double>();
    out.least_nights = in.at("least_nights").get<int>();
    out.most_nights = in.at("most_nights").get<int>();
    return out.problem() ? CompareOptions{} : out;
  } catch (const std::exception&) {
    return {};
  }
}

Result<PastRun> run_of(const std::string& text, const std::string& where) {
  const auto refuse = [&](const std::string& why) {
    return Failure{Fault::not_quotes, where, "is not the account of a run: " + why};
  };
  try {
    const json in = json::parse(text);
    const json& configuration = in.at("configuration");
    const auto as_of = quotes::parse_as_of(in.at("as_of").get<std::string>(),
                                           configuration.at("zone").get<std::string>());
    if (!as_of) return refuse("`as_of` is not an instant");
    PastRun run;
    run.as_of = *as_of;
    run.grid = grid_of(configuration);
    run.compare = compare_of(configuration);
    for (const auto& [name, record] : in.at("underlyings").items())
      run.underlyings[name].record = record_of(name, record);
    return run;
  } catch (const json::exception& error) {
    return refuse(error.what());
  }
}

// Rows of our own making: underlying, expiry and, last, the print.
Result<bool> read_prints(const std::string& path, PastRun& run) {
  const auto refuse = [&](const std::string& why) { return Failure{Fault::not_quotes, path, why}; };
  auto source = quotes::TextSource::open(path);
  if (!source) return source.failure();
  constexpr std::size_t kColumns = 7;
  try {
    quotes::RowReader rows(std::move(source.value()));
    std::vector<std::string_view> cells;
    quotes::Row row;
    const auto header = kExpiriesHeader.substr(0, kExpiriesHeader.size() - 1);
    if (!rows.next(row) || std::string_view(row.text, row.size) != header)
      return refuse("does not have the columns of an expiries.csv");
    while (rows.next(row)) {
      if (row.open_quote) return refuse("a quotation mark is never closed");
      quotes::split_row(row, ',', cells);
      if (cells.size() != kColumns) return refuse(fmt::format("line {} is cut short", row.line));
      const auto expiry = quotes::parse_date_cell(cells[1]);
      const auto found = run.underlyings.find(unguarded(cells[0]));
      if (!expiry || found == run.underlyings.end())
        return refuse(fmt::format("line {} names no expiry of the run", row.line));
      found->second.prints.push_back(
          {quotes::resolve(*expiry, run.as_of.clock, std::chrono::hours{16}),
           std::string(cells.back())});
    }
    if (auto stopped = rows.failure(path)) return *stopped;
    return true;
  } catch (const std::exception& caught) {
    return refuse(caught.what());
  }
}

bool named_by_a_date(const std::string& name) {
  const auto cell = quotes::parse_date_cell(name);
  return name.size() == 10 && cell && cell->date && !cell->time_of_day;
}

}  // namespace

Result<PastRun> read_past_run(const std::string& folder) {
  const std::string account = folder + "/run.json";
  const auto text = read_text(account);
  if (!text) return text.failure();
  auto run = run_of(*text, account);
  if (!run) return run.failure();
  run->folder = folder;
  Sha256 sum;
  sum.add(*text);
  run->sha256 = sum.hex();
  std::error_code error;
  const std::string prints = folder + "/expiries.csv";
  if (fs::exists(prints, error))
    if (auto read = read_prints(prints, *run); !read) return read.failure();
  return run;
}

Result<StoredSurface> read_stored_surface(const std::string& path) {
  const auto text = read_text(path);
  if (!text) return text.failure();
  return surface_from_json(*text, path);
}

Result<StoredSurface> read_past_surface(const PastRun& run, const std::string& name) {
  const std::string path = run.folder + "/surfaces/" + encode_file_name(name) + ".json";
  auto stored = read_stored_surface(path);
  if (!stored) return stored.failure();
  if (stored->surface.underlying != name || stored->as_of.instant != run.as_of.instant)
    return Failure{Fault::not_quotes, path, "is the surface of another name or night"};
  return stored;
}

std::optional<PastRun> find_past_run(const std::string& out, const std::string& before_date,
                                     quotes::Instant as_of, std::vector<std::string>& remarks) {
  std::vector<std::string> dates;
  std::error_code error;
  for (fs::directory_iterator at(out, error), end; !error && at != end; at.increment(error)) {
    const std::string name = at->path().filename();
    if (named_by_a_date(name) && name < before_date) dates.push_back(name);
  }
  std::sort(dates.begin(), dates.end(), std::greater<>());
  for (const auto& date : dates) {
    auto run = read_past_run(out + "/" + date);
    if (run && run->as_of.instant < as_of) return std::move(*run);
    if (!run) remarks.push_back("the run of " + date + " is passed over: " + run.failure().text());
  }
  return std::nullopt;
}

}  // namespace duskgrid::publish
