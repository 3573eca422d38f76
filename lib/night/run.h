// A whole night: files in, a run folder out.
#pragma once

#include <cstdint>
#include <functional>
#include <stop_token>
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
  double wait_seconds = 0;  // how long another run that writes to `out` is waited for, >= 0
  // Looked at between stages, underlyings and lines written: the run then ends in Fault::stopped
  // with nothing left behind. One file being read, or one underlying being marked, is not cut
  // short. A stop that comes when the run is in its place changes nothing.
  std::stop_token stop = {};
};

struct NightOutcome {
  publish::RunRecord record;
  std::vector<MarkedUnderlying>
      underlyings;  // by name; without their grids, which are in the folder
  std::vector<quotes::FileSummary> files;
  std::string folder;                // where it was published
  std::string run_sha256;            // of run.json, which names the sums of all the rest
  std::vector<std::string> remarks;  // what a person should know of the run as a whole
};

// Loads, cleans, marks every underlying and publishes. `out` is locked from when the quotes are
// read, and written to from the stage "publish" on. The folder is <out>/<local date of the
// as-of>; a run that could mark nothing does not replace one that did, but goes beside it under
// "<date>-refused". Failures are those of resolve(), load_quotes() and RunFolder, and
// stopped; nothing is published then. Same inputs give the same bytes for any number of threads,
// but for timings.json.
Result<NightOutcome> run_night(const NightConfig& config, const RunOptions& options);

}  // namespace duskgrid::night
