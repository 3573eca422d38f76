// Tonight against the night before: changes.csv, and the flags that follow from it. How two nights
// are compared: publish/compare.h.
#pragma once

#include <functional>
#include <map>
#include <string>
#include <vector>

#include "night/mark.h"
#include "publish/compare.h"
#include "publish/history.h"
#include "publish/past_run.h"
#include "publish/run_folder.h"

namespace duskgrid::night {

struct ComparedNights {
  const publish::PastRun* previous;  // with its surfaces; none on a first night
  std::map<std::string, publish::TermNights> past;
};

// The at-the-money volatilities of nights before `before_date` in the history of `out`, where there
// is one; a history that cannot be read is said in `remarks`.
std::map<std::string, publish::TermNights> past_terms(const std::string& out,
                                                      const std::string& before_date,
                                                      const publish::CompareOptions& options,
                                                      std::vector<std::string>& remarks);

// Writes changes.csv, a header alone without a night before. Underlyings with nodes to sign off,
// expiries that vanished, or the quotes of the night before get a message, and are flagged where
// they were published without.
// `seen`, where there is one, is shown what was found of every name of tonight, flags and all, from
// several threads at once.
using SeenChange = std::function<void(const MarkedUnderlying&, const publish::UnderlyingChange&)>;
Result<bool> write_changes(publish::RunFolder& folder, std::vector<MarkedUnderlying>& marked,
                           const ComparedNights& nights, const NightConfig& config,
                           const ResolvedNight& night, const SeenChange& seen = {});

// Two nights of run folders, `now`'s nodes being those of its configuration; by name.
std::vector<publish::UnderlyingChange> compare_runs(
    const publish::PastRun& before, const publish::PastRun& now,
    const std::map<std::string, publish::TermNights>& past, const publish::CompareOptions& options);
// The nodes of a stored surface, as a run configured so would publish them.
std::vector<publish::GridNode> nodes_of(const publish::StoredSurface& stored,
                                        const publish::GridOptions& options);

// Puts the night into <out>/history.sqlite. Failure: as History::open() and write_night().
Result<bool> write_history(const std::string& out, const std::vector<MarkedUnderlying>& marked,
                           const NightConfig& config, const ResolvedNight& night,
                           const std::string& version);

}  // namespace duskgrid::night
