// A run folder read back: what a later night compares with and carries from. Every file is taken
// as it comes from outside: another program may have touched it.
#pragma once

#include <map>
#include <optional>
#include <string>
#include <vector>

#include "publish/compare.h"
#include "publish/grid.h"
#include "publish/run_record.h"
#include "publish/surface_json.h"

namespace duskgrid::publish {

struct PastUnderlying {
  UnderlyingRecord record;
  std::vector<ExpiryPrint> prints;      // by expiry, of expiries.csv
  std::optional<StoredSurface> stored;  // filled by read_past_surface()
};

struct PastRun {
  std::string folder;  // as given
  std::string sha256;  // of its run.json
  quotes::AsOf as_of;
  // As the run was configured: where its nodes were, and which changes wanted a signature. Without
  // what cannot be read, the defaults.
  GridOptions grid;
  CompareOptions compare;
  std::map<std::string, PastUnderlying> underlyings;
};

// run.json and, where there is one, expiries.csv. Failure: no_input without a run.json that can be
// read, not_quotes where one of them is not such a file.
Result<PastRun> read_past_run(const std::string& folder);
// The surface of a name that has one in run.json. Failure: as surface_from_json(), no_input without
// the file, not_quotes where it is another name's or night's.
Result<StoredSurface> read_past_surface(const PastRun& run, const std::string& name);
// A surface from a file of its own.
Result<StoredSurface> read_stored_surface(const std::string& path);

// The last complete run in `out` before a date, of those named by their date alone. Nothing when
// there is none; folders that cannot be read are passed over and said in `remarks`.
std::optional<PastRun> find_past_run(const std::string& out, const std::string& before_date,
                                     quotes::Instant as_of, std::vector<std::string>& remarks);

}  // namespace duskgrid::publish
