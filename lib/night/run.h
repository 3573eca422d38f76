// A whole night: files in, a run folder out.
#pragma once

#include <cstdint>
#include <functional>
#include <string>
#include <string_view>
#include <vector>

#include "night/config.h"
#include "night/mark.h"
#include "publish/run_record.h"
#include "quotes/load.h"

namespace duskgrid::night {

// Called as work goes on, from the calling thread or a worker, one call at a time: stage, and how
// much of it is done (0 of 0 at its start).
using Progress = std::function<void(std::string_view stage, std::int64_t done, std::int64_t total)>;

struct RunOptions {
  std::string out = "out";  // folder that holds a folder a night
  int threads = 0;          // 0 takes as many as the machine has
  Progress progress;        // may be empty
};

struct NightOutcome {
  publish::RunRecord record;
  std::vector<MarkedUnderlying>
      underlyings;  // by name; without their grids, which are in the folder
  std::vector<quotes::FileSummary> files;
  std::string folder;                // where it was published
  std::vector<std::string> remarks;  // what a person should know of the run as a whole
};

// Loads, cleans, marks every underlying and publishes. The folder is <out>/<local date of the
// as-of>; a run that could mark nothing does not replace one that did, but goes beside it under
// "<date>-refused". Failures are those of resolve(), load_quotes() and RunFolder; nothing is
// published then. Same inputs give the same bytes for any number of threads, but for timings.json.
Result<NightOutcome> run_night(const NightConfig& config, const RunOptions& options);

}  // namespace duskgrid::night
