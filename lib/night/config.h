// The configuration of a night: one TOML file, or defaults. One table of options
// (options()) feeds the reader, the resolved copy in run.json, and the manual.
#pragma once

#include <chrono>
#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "market/curve.h"
#include "market/dividend_file.h"
#include "market/parity.h"
#include "pricing/american_dividend_batch.h"
#include "pricing/selection.h"
#include "publish/compare.h"
#include "publish/grid.h"
#include "publish/report.h"
#include "quotes/clean.h"
#include "quotes/load.h"
#include "surface/fit.h"

namespace duskgrid::night {

// What a user states about one underlying.
struct UnderlyingFacts {
  std::optional<double> spot;               // quote currency
  std::optional<double> carry;              // continuous yield, decimals a year
  std::optional<double> borrow;             // the same on top of the dividends
  std::map<std::string, double> dividends;  // ex date as written, to quote currency a share
  std::map<std::string, double> proportional_dividends;  // the same, to a share of the spot
  std::map<std::string, double> forwards;    // date or instant as written, to quote currency
  std::optional<quotes::Exercise> exercise;  // over what its file says by default
};

struct FlagOptions {
  // Share of used quotes that may be missed by more than a half-spread beyond the spread before
  // the underlying is flagged. Range: 0 to 1.
  double most_missed = 0.1;
};

// How long a surface stands in for one that cannot be made.
struct CarryOptions {
  // Age of the quotes behind it, business days from their night to tonight. Range: 0 to 250; 0
  // carries nothing. Larger keeps names in the grid whose market has gone.
  int most_business_days = 5;
};

struct HistoryOptions {
  // Whether whole surfaces are kept in the history, some 10 kB an underlying and night.
  bool surfaces = true;
};

struct NightConfig {
  std::string as_of_text;  // as written; the command line wins
  std::string zone;        // IANA name; empty for the as-of's own offset
  std::map<std::string, std::string> settlement_times;
  std::vector<std::string> holidays;  // dates as written
  std::vector<quotes::SourceOptions> sources;
  std::map<std::string, double> rates;  // tenor or date, to continuous zero rate
  std::map<std::string, double> discount_factors;
  std::map<std::string, UnderlyingFacts> underlyings;
  std::optional<double> spot;                // of underlyings that have none of their own
  std::optional<quotes::Exercise> exercise;  // of sources that state none
  std::vector<std::string> dividend_files;
  quotes::CleanOptions clean;
  market::ParityOptions parity;
  pricing::SelectionOptions selection;
  surface::BackboneOptions backbone;
  surface::OverlayOptions overlay;
  publish::GridOptions grid;
  FlagOptions flags;
  publish::CompareOptions compare;
  CarryOptions carry;
  HistoryOptions history;
  publish::ReportScope report = publish::ReportScope::automatic;
};

// What must be known before a night can run, worked out of its configuration.
struct ResolvedNight {
  quotes::AsOf as_of;
  quotes::TimeRules times;
  std::optional<market::ZeroCurve> curve;
  // Of files and configuration together.
  market::DividendTable dividends;
  std::vector<std::pair<std::string, std::int64_t>> dividend_rows;  // by file
  pricing::DividendInverter american;                               // its tables, made once
  std::vector<std::chrono::sys_days> holidays;                      // any order
};

// One line of the manual.
struct OptionEntry {
  std::string_view table;  // "", "source", "clean", "underlying.NAME", ...
  std::string_view key;
  std::string range;     // what may stand there
  std::string fallback;  // default, as written
  std::string_view meaning;
};
std::vector<OptionEntry> options();

// Reads a configuration; file names in it are relative to `folder`. Failure (configuration, at
// `where`): TOML that cannot be parsed, an unknown key (named, with the nearest known one), a value
// of the wrong kind or out of range.
Result<NightConfig> parse_config(std::string_view toml_text, const std::string& where,
                                 const std::string& folder);
// The same from a file. Failure no_input when it cannot be read.
Result<NightConfig> read_config(const std::string& path);

// Reads the dividend files. Failure: usage for a bad or missing as-of, configuration for a bad
// zone, time or rate, and those of read_dividends().
Result<ResolvedNight> resolve(const NightConfig& config);

// The sources as they are read: what the night says stands where they are silent.
std::vector<quotes::SourceOptions> sources_of(const NightConfig& config);

// Every option with the value it has, as JSON text.
std::string config_to_json(const NightConfig& config);

// The nearest of `known` by edit distance, or empty when none is near.
std::string nearest(std::string_view word, const std::vector<std::string>& known);

}  // namespace duskgrid::night
