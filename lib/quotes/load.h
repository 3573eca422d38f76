// Quote files in, a QuoteTable out: every contract read becomes a Quote, unreadable
// ones included. Not for judging quotes: clean.h.
#pragma once

#include <chrono>
#include <map>
#include <string>
#include <vector>

#include "quotes/columns.h"
#include "quotes/instants.h"
#include "quotes/quote.h"
#include "quotes/result.h"

namespace duskgrid::quotes {

// A group of files of one habit.
struct SourceOptions {
  std::vector<std::string> files;  // paths or globs (* ? [])
  Layout layout = Layout::automatic;
  char delimiter = 0;  // 0 finds it among , ; tab
  char decimal = '.';  // '.' or ','
  // Accepted only between groups of three digits. 0 takes the comma, or the point where the
  // decimal mark is the comma; then a lone group such as 1,250 in a file whose delimiter is not the
  // comma is refused, for it may be a decimal comma.
  char thousands = 0;
  std::map<std::string, std::string> columns;  // field word to header as written
  std::map<std::string, std::string> fixed;    // field word to text, for what the file lacks
  std::string date_format;                     // see parse_date_cell; empty finds it
  std::vector<std::string> null_words;         // beside NA, N/A, null, nan, none, - and empty
  double strike_scale = 1;                     // multiply what is read; all > 0
  double price_scale = 1;
  double vol_scale = 1;  // 0.01 when vols are written in percent
  // For files with one `price`: bid and ask are price -+ half_spread, where
  // half_spread = half_spread_absolute + half_spread_relative * price. Both >= 0 and
  // one stated, else a file with only a price is refused.
  double half_spread_absolute = kAbsent;  // quote currency
  double half_spread_relative = kAbsent;  // fraction of the price
  std::optional<Exercise> exercise;       // where no column says; european without it
  std::optional<std::string> problem() const;
};

// How dates become instants.
struct TimeRules {
  Clock clock;
  std::chrono::seconds default_time{std::chrono::hours{16}};
  // Settlement word (folded to lower case) to time of day, e.g. {"am", 09:30}.
  std::map<std::string, std::chrono::seconds> settlement_times;
};

// What one file turned out to be.
struct FileSummary {
  std::string file;
  std::int64_t bytes = 0;   // as stored
  std::string sha256;       // of the stored bytes, taken as they were read
  std::string compression;  // "none", "gzip", "zstd"
  char delimiter = ',';
  ColumnMap columns;
  // Of rows whose style no column says, where the source states it; european without it.
  std::optional<Exercise> exercise;
  std::int64_t rows = 0;        // data rows
  std::int64_t contracts = 0;   // rows, or twice that for call-put rows
  std::int64_t unreadable = 0;  // contracts
};

struct LoadedQuotes {
  QuoteTable table;
  std::vector<FileSummary> files;
};

// Reads all sources in order (globs sorted by name, a file named twice read once).
// The rows of a file are read by several threads, as many as tbb::global_control allows; the result
// does not depend on that. fast-cpp-csv-parser splits cells; a quoted cell may hold line feeds, and
// the quote keeps the first line's number. Compression is known by content. UTF-8 with or without a
// byte-order mark, LF or CRLF. An empty file has no rows. Failures: no_input for a missing or
// unreadable file, a folder, or a glob that matches nothing; not_quotes for text that is no CSV,
// other encodings (named), NUL bytes, damaged compression, lines past 1 MiB; configuration for bad
// options. One bad file fails the load: a night that silently lacks a file is worse than none.
Result<LoadedQuotes> load_quotes(const std::vector<SourceOptions>& sources, const TimeRules& rules);

}  // namespace duskgrid::quotes
