#include "quotes/load.h"

#include <fmt/format.h>
#include <sys/mman.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <exception>
#include <filesystem>
#include <new>
#include <set>
#include <stdexcept>
#include <utility>

#include "quotes/bytes.h"
#include "quotes/contracts.h"
#include "quotes/memo.h"
#include "quotes/paths.h"
#include "quotes/rows.h"

namespace duskgrid::quotes {
namespace {

// A header with more cells than this is no quote file, and no row of it is worth the
// memory of its cells.
constexpr std::size_t kMostColumns = 4096;
constexpr std::size_t kHeaderShown = 60;
// Room made beforehand from the size of a file, in contracts: as many as an exchange's
// whole night. The shortest row that can carry a contract has about this many bytes.
constexpr std::size_t kMostReserved = std::size_t{1} << 22;
constexpr std::size_t kShortestRow = 16;

Failure not_quotes(const std::string& file, std::string detail) {
  return {Fault::not_quotes, file, std::move(detail)};
}

std::string shown(char c) { return c == '\t' ? "tab" : std::string(1, c); }

// The first rows of a file, copied: the header decides how all others are read, and
// the first row after it helps where the header leaves a doubt.
struct Opening {
  std::string header;
  std::string first;  // empty when there is none
  bool first_sound = false;
};

std::vector<std::string> split_copy(std::string text, char delimiter) {
  std::vector<std::string_view> cells;
  Row row;
  row.text = text.data();
  row.size = text.size();
  row.quoted = text.find('"') != std::string::npos;
  split_row(row, delimiter, cells);
  return {cells.begin(), cells.end()};
}

// Touching fresh memory a small page at a time costs as much as splitting the file.
void prefer_huge_pages([[maybe_unused]] void* start, [[maybe_unused]] std::size_t bytes) {
#ifdef MADV_HUGEPAGE
  constexpr std::uintptr_t kPage = std::uintptr_t{1} << 21;
  const auto address = reinterpret_cast<std::uintptr_t>(start);
  const std::uintptr_t first = (address + kPage - 1) / kPage * kPage;
  const std::uintptr_t end = (address + bytes) / kPage * kPage;
  // Advice only: where it is not taken, nothing but the speed differs.
  if (end > first) ::madvise(reinterpret_cast<void*>(first), end - first, MADV_HUGEPAGE);
#endif
}

// One file on its way into the table.
class FileLoad {
 public:
  FileLoad(const SourceOptions& options, const TimeRules& rules, const std::string& path,
           LoadedQuotes& loaded, NameIndex& names)
      : options_(options), rules_(rules), path_(path), loaded_(loaded), names_(names) {}

  std::optional<Failure> run() {
    auto source = TextSource::open(path_);
    if (!source) return source.failure();
    RowReader rows(std::move(source.value()));
    summary_.file = path_;
    auto failure = read_rows(rows);
    // What stopped the text explains more than what the rows before it looked like.
    if (auto stopped = rows.failure(path_)) return stopped;
    if (failure) return failure;
    summary_.bytes = rows.source().stored_bytes();
    summary_.compression = rows.source().compression();
    loaded_.files.push_back(std::move(summary_));
    return std::nullopt;
  }

 private:
  std::optional<Failure> read_rows(RowReader& rows) {
    Row row;
    // An empty file is a night without quotes, not a broken one.
    if (!rows.next(row)) {
      loaded_.table.files.push_back(path_);
      return std::nullopt;
    }
    if (row.open_quote) {
      return not_quotes(path_, "a quotation mark in the header row is never closed");
    }
    Opening opening{std::string(row.text, row.size), {}, false};
    const bool more = rows.next(row);
    if (more) opening.first.assign(row.text, row.size);
    opening.first_sound = more && !row.open_quote;
    if (auto failure = map_header(opening)) return failure;

    loaded_.table.files.push_back(path_);
    SourceOptions found = options_;
    found.delimiter = summary_.delimiter;
    ContractReader contracts(found, rules_, summary_.columns, header_cells_, loaded_.table, names_);
    if (auto failure = contracts.problem()) {
      failure->where = path_ + ": " + failure->where;
      return failure;
    }
    if (more) make_room(contracts.contracts_per_row(), opening.first.size());
    for (bool is_row = more; is_row; is_row = rows.next(row)) add(rows, row, contracts);
    return std::nullopt;
  }

  std::optional<Failure> map_header(const Opening& opening) {
    if (opening.header.find('\r') != std::string::npos) {
      return not_quotes(path_, "its lines end in CR alone; save it with LF or CRLF");
    }
    summary_.delimiter = options_.delimiter != 0 ? options_.delimiter
                                                 : find_delimiter(opening.header, opening.first);
    const auto headers = split_copy(opening.header, summary_.delimiter);
    header_cells_ = headers.size();
    if (header_cells_ == 1) {
      return not_quotes(
          path_,
          fmt::format("is no CSV file of quotes: its header row has one column, \"{}\", and no {}",
                      headers.front().substr(0, kHeaderShown),
                      options_.delimiter != 0 ? shown(options_.delimiter) : ", ; or tab"));
    }
    if (header_cells_ > kMostColumns) {
      return not_quotes(path_, fmt::format("its header row has {} columns, more than {}",
                                           header_cells_, kMostColumns));
    }
    std::vector<std::string> first_row;
    if (opening.first_sound) first_row = split_copy(opening.first, summary_.delimiter);
    auto columns =
        map_columns(headers, first_row, options_.layout, options_.columns, options_.fixed);
    if (!columns) {
      Failure failure = columns.failure();
      failure.where = path_ + ": " + failure.where;
      return failure;
    }
    summary_.columns = std::move(columns.value());
    return std::nullopt;
  }

  // Quotes are large, and moving them as the table grows costs as much as reading them.
  void make_room(int contracts_per_row, std::size_t row_size) {
    std::error_code error;
    const std::uintmax_t bytes = std::filesystem::file_size(path_, error);
    if (error) return;
    const std::size_t rows =
        std::min<std::uintmax_t>(bytes / std::max(row_size, kShortestRow), kMostReserved);
    auto& quotes = loaded_.table.quotes;
    const std::size_t needed =
        quotes.size() + (rows + rows / 8 + 1) * static_cast<std::size_t>(contracts_per_row);
    if (needed <= quotes.capacity()) return;
    quotes.reserve(std::max(needed, 2 * quotes.capacity()));
    prefer_huge_pages(quotes.data(), quotes.capacity() * sizeof(Quote));
  }

  // A stray quotation mark swallows the lines to the next one, which may even come out
  // with the right number of cells. It shows in that the lines have delimiters
  // enough to be rows each, which lines of a remark hardly have.
  bool hides_rows(const Row& row) const {
    const std::string_view text(row.text, row.size);
    std::ptrdiff_t lines = 0;
    for (std::size_t at = 0; at <= text.size();) {
      const std::size_t end = std::min(text.find('\n', at), text.size());
      lines += end > at;
      at = end + 1;
    }
    const auto delimiters = std::count(text.begin(), text.end(), summary_.delimiter);
    return delimiters >= lines * static_cast<std::ptrdiff_t>(header_cells_ - 1);
  }

  void add(RowReader& rows, const Row& row, ContractReader& contracts) {
    const auto file = static_cast<std::int32_t>(loaded_.table.files.size() - 1);
    bool open_quote = row.open_quote;
    if (row.joined && hides_rows(row)) {
      rows.split_joined();
      open_quote = true;
    }
    if (!open_quote) {
      split_row(row, summary_.delimiter, cells_);
      if (row.joined && cells_.size() != header_cells_) {
        rows.split_joined();
        open_quote = true;
      }
    }
    const int unreadable = open_quote ? contracts.add_unreadable(Note::open_quote, file, row.line)
                                      : contracts.add_row(cells_, file, row.line);
    ++summary_.rows;
    summary_.contracts += contracts.contracts_per_row();
    summary_.unreadable += unreadable;
  }

  const SourceOptions& options_;
  const TimeRules& rules_;
  const std::string& path_;
  LoadedQuotes& loaded_;
  NameIndex& names_;
  FileSummary summary_;
  std::size_t header_cells_ = 0;
  std::vector<std::string_view> cells_;
};

std::optional<std::string> problem_with_sizes(const SourceOptions& options) {
  const std::array<std::pair<const char*, double>, 3> scales{
      {{"strike_scale", options.strike_scale},
       {"price_scale", options.price_scale},
       {"vol_scale", options.vol_scale}}};
  for (const auto& [word, value] : scales) {
    if (std::isfinite(value) && value > 0) continue;
    return fmt::format("{} = {}, must be above 0", word, value);
  }
  const std::array<std::pair<const char*, double>, 2> spreads{
      {{"half_spread", options.half_spread_absolute},
       {"half_spread_relative", options.half_spread_relative}}};
  for (const auto& [word, value] : spreads) {
    if (std::isnan(value) || (std::isfinite(value) && value >= 0)) continue;
    return fmt::format("{} = {}, must be at least 0", word, value);
  }
  return std::nullopt;
}

std::optional<Failure> problem_with_rules(const TimeRules& rules) {
  if (const auto problem = rules.clock.problem()) {
    return Failure{Fault::configuration, "zone", *problem};
  }
  constexpr std::chrono::hours kDay{24};
  for (const auto& [word, time] : rules.settlement_times) {
    if (time.count() >= 0 && time < kDay) continue;
    return Failure{Fault::configuration, "settlement_times",
                   fmt::format("{} = {} seconds, must be a time of day", word, time.count())};
  }
  if (rules.default_time.count() >= 0 && rules.default_time < kDay) return std::nullopt;
  return Failure{
      Fault::configuration, "default_time",
      fmt::format("default_time = {} seconds, must be a time of day", rules.default_time.count())};
}

std::optional<Failure> problem_with(const std::vector<SourceOptions>& sources,
                                    const TimeRules& rules) {
  for (const SourceOptions& options : sources) {
    auto problem = options.problem();
    if (!problem && options.files.empty()) problem = "files = [], must name a file";
    if (problem) return Failure{Fault::configuration, "source", *problem};
  }
  return problem_with_rules(rules);
}

std::optional<Failure> load_source(const SourceOptions& options, const TimeRules& rules,
                                   std::set<std::string>& seen, LoadedQuotes& loaded,
                                   NameIndex& names) {
  const auto paths = expand_files(options.files);
  if (!paths) return paths.failure();
  for (const std::string& path : *paths) {
    if (!seen.insert(canonical_path(path)).second) continue;
    try {
      if (auto failure = FileLoad(options, rules, path, loaded, names).run()) return failure;
    } catch (const std::bad_alloc&) {
      return not_quotes(path, "holds more than the memory of this machine can take");
    } catch (const std::length_error&) {
      return not_quotes(path, "holds more than the memory of this machine can take");
    }
  }
  return std::nullopt;
}

}  // namespace

std::optional<std::string> SourceOptions::problem() const {
  const auto one_of = [](char c, std::string_view allowed) {
    return allowed.find(c) != std::string_view::npos;
  };
  if (delimiter != 0 && !one_of(delimiter, ",;\t")) {
    return fmt::format("delimiter = \"{}\", must be , ; or tab", delimiter);
  }
  if (!one_of(decimal, ".,")) return fmt::format("decimal = \"{}\", must be . or ,", decimal);
  if (thousands != 0 && !one_of(thousands, ",. '_")) {
    return fmt::format("thousands = \"{}\", must be one of , . ' _ and space", thousands);
  }
  if (thousands == decimal) {
    return fmt::format("thousands = \"{}\", must differ from decimal", thousands);
  }
  if (!date_format.empty()) {
    if (auto problem = date_format_problem(date_format)) return problem;
  }
  return problem_with_sizes(*this);
}

Result<LoadedQuotes> load_quotes(const std::vector<SourceOptions>& sources,
                                 const TimeRules& rules) {
  if (sources.empty()) return Failure{Fault::no_input, "", "no quote file is named"};
  try {
    if (auto failure = problem_with(sources, rules)) return *failure;
    LoadedQuotes loaded;
    NameIndex names(loaded.table.underlyings);
    std::set<std::string> seen;
    for (const SourceOptions& options : sources) {
      if (auto failure = load_source(options, rules, seen, loaded, names)) return *failure;
    }
    return loaded;
  } catch (const std::exception& error) {
    return Failure{Fault::no_input, "", std::string("reading the quotes failed: ") + error.what()};
  }
}

}  // namespace duskgrid::quotes
