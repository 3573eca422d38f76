// The account of a run: run.json, and timings.json for what may differ between two equal runs.
#pragma once

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/instants.h"
#include "quotes/ledger.h"
#include "quotes/result.h"

namespace duskgrid::publish {

enum class Status : std::uint8_t { published, flagged, carried, refused };
std::string_view word(Status status);

struct InputRecord {
  std::string file;
  std::string sha256;
  std::int64_t bytes = 0;
  std::int64_t rows = 0;
};

struct UnderlyingRecord {
  std::string name;
  Status status = Status::refused;
  bool certified = false;  // proved free of arbitrage, not only looked at on points
  std::int64_t slices = 0;
  std::int64_t used = 0;    // quotes in the fit
  std::int64_t inside = 0;  // of those, how many the surface meets inside bid-ask
  std::int64_t violations = 0;
  std::string carried_from;  // as-of of the night carried, empty when not
  std::string message;       // why flagged or refused, in a few words
};

// The run that a night was compared with, and from which it carried.
struct PreviousRecord {
  std::string folder;  // its name, without the way to it
  std::string as_of;
  std::string sha256;  // of its run.json, which has those of its other files
};

struct RunRecord {
  std::string version;
  quotes::AsOf as_of;
  std::string configuration;  // JSON text, as resolved
  std::vector<InputRecord> inputs;
  std::map<std::string, std::string> outputs;  // path in the folder to SHA-256
  quotes::LedgerCounts rows;
  std::vector<UnderlyingRecord> underlyings;
  std::optional<PreviousRecord> previous = {};
};
std::string run_to_json(const RunRecord& run);
// The record back, its configuration as compact JSON. Failure (not_quotes, at `where`): not JSON, a
// key is missing or of another type, a word is unknown, or made by another tool.
Result<RunRecord> run_from_json(std::string_view text, const std::string& where);

struct StageTime {
  std::string stage;
  double wall_seconds;
  double cpu_seconds;
};
struct Timings {
  std::vector<StageTime> stages;
  int threads;
  std::int64_t peak_memory_bytes;
};
std::string timings_to_json(const Timings& timings);

}  // namespace duskgrid::publish
