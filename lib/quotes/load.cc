#include "quotes/load.h"

#include <fmt/format.h>
#include <sys/mman.h>
#include <tbb/enumerable_thread_specific.h>
#include <tbb/global_control.h>
#include <tbb/parallel_pipeline.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <exception>
#include <filesystem>
#include <limits>
#include <new>
#include <set>
#include <stdexcept>
#include <utility>

#include "quotes/blocks.h"
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
    summary_.file = path_;
    summary_.exercise = options_.exercise;
    if (auto failure = read_opening()) return failure;
    auto source = TextSource::open(path_);
    if (!source) return source.failure();
    BlockReader blocks(std::move(source.value()));
    loaded_.table.files.push_back(path_);
    if (auto failure = read_body(blocks)) return failure;
    loaded_.files.push_back(std::move(summary_));
    return std::nullopt;
  }

 private:
  // How all rows are read. The file is opened apart for it, and again for its body.
  std::optional<Failure> read_opening() {
    auto source = TextSource::open(path_);
    if (!source) return source.failure();
    RowReader rows(std::move(source.value()));
    auto failure = read_header(rows);
    // What stopped the text explains more than what the rows before it looked like.
    if (auto stopped = rows.failure(path_)) return stopped;
    return failure;
  }

  std::optional<Failure> read_header(RowReader& rows) {
    Row row;
    // An empty file is a night without quotes, not a broken one.
    if (!rows.next(row)) return std::nullopt;
    if (row.open_quote) {
      return not_quotes(path_, "a quotation mark in the header row is never closed");
    }
    Opening opening{std::string(row.text, row.size), {}, false};
    const bool more = rows.next(row);
    if (more) opening.first.assign(row.text, row.size);
    opening.first_sound = more && !row.open_quote;
    if (auto failure = map_header(opening)) return failure;

    options_.delimiter = summary_.delimiter;
    const ContractReader contracts = reader();
    if (auto failure = contracts.problem()) {
      failure->where = path_ + ": " + failure->where;
      return failure;
    }
    contracts_per_row_ = contracts.contracts_per_row();
    if (!more) return std::nullopt;
    first_line_ = row.line;
    make_room(contracts_per_row_, opening.first.size());
    return std::nullopt;
  }

  ContractReader reader() const { return {options_, rules_, summary_.columns, header_cells_}; }

  std::optional<Failure> read_body(BlockReader& blocks) {
    BatchMerger merger(loaded_.table, names_, header_cells_);
    read_blocks(blocks, merger);
    RowReader rows = std::move(blocks).rest();
    read_rows(rows, merger);
    if (auto stopped = rows.failure(path_)) return stopped;
    summary_.contracts = summary_.rows * contracts_per_row_;
    summary_.bytes = rows.source().stored_bytes();
    summary_.compression = rows.source().compression();
    summary_.sha256 = rows.source().sha256();
    return std::nullopt;
  }

  struct ThreadReader {
    ContractReader contracts;
    std::vector<std::string_view> cells;
  };

  // Blocks are read one after the other, their rows side by side, and joined in order.
  void read_blocks(BlockReader& blocks, BatchMerger& merger) {
    constexpr std::size_t kBlocksAThread = 3;
    tbb::enumerable_thread_specific<ThreadReader> readers([&] {
      return ThreadReader{reader(), {}};
    });
    const auto next = [&](tbb::flow_control& flow) {
      TextBlock block;
      if (!blocks.next(block)) flow.stop();
      return block;
    };
    const auto read = [&](TextBlock block) { return read_block(block, readers.local()); };
    const auto join = [&](const ContractBatch& batch) { add(batch, merger); };
    tbb::parallel_pipeline(
        kBlocksAThread *
            tbb::global_control::active_value(tbb::global_control::max_allowed_parallelism),
        tbb::make_filter<void, TextBlock>(tbb::filter_mode::serial_in_order, next) &
            tbb::make_filter<TextBlock, ContractBatch>(tbb::filter_mode::parallel, read) &
            tbb::make_filter<ContractBatch, void>(tbb::filter_mode::serial_in_order, join));
  }

  ContractBatch read_block(TextBlock& block, ThreadReader& reader) const {
    BlockRows rows(block, first_line_);
    for (Row row; rows.next(row);) {
      split_row(row, summary_.delimiter, reader.cells);
      reader.contracts.add_row(reader.cells, file(), row.line);
    }
    return reader.contracts.take();
  }

  // The rest of the text, whatever is in it.
  void read_rows(RowReader& rows, BatchMerger& merger) {
    constexpr std::int64_t kRowsABatch = 4096;
    ContractReader contracts = reader();
    std::int64_t count = 0;
    for (Row row; rows.next(row);) {
      if (row.line < first_line_) continue;
      add_row(rows, row, contracts);
      if (++count % kRowsABatch == 0) add(contracts.take(), merger);
    }
    add(contracts.take(), merger);
  }

  void add(const ContractBatch& batch, BatchMerger& merger) {
    merger.merge(batch);
    summary_.rows += batch.rows;
    summary_.unreadable += batch.unreadable;
  }

  std::int32_t file() const { return static_cast<std::int32_t>(loaded_.table.files.size() - 1); }

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

  void add_row(RowReader& rows, const Row& row, ContractReader& contracts) {
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
    if (open_quote)
      contracts.add_unreadable(Note::open_quote, file(), row.line);
    else
      contracts.add_row(cells_, file(), row.line);
  }

  SourceOptions options_;  // with the delimiter that the file has
  const TimeRules& rules_;
  const std::string& path_;
  LoadedQuotes& loaded_;
  NameIndex& names_;
  FileSummary summary_;
  std::size_t header_cells_ = 0;
  int contracts_per_row_ = 1;
  // Of the first row after the header; beyond all where there is none.
  std::int64_t first_line_ = std::numeric_limits<std::int64_t>::max();
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
