// The report of a night: who gets a page, what each page is made from, and its files.
#pragma once

#include <map>
#include <optional>
#include <string>
#include <vector>

#include "night/changes.h"
#include "night/config.h"
#include "night/mark.h"
#include "publish/report.h"
#include "publish/run_folder.h"
#include "publish/run_record.h"

namespace duskgrid::night {

// What else a page shows of one underlying, found by other parts of a night; all may be empty.
struct ReportExtras {
  std::vector<publish::ReportChange> changes;  // in the order to be shown
  std::optional<quotes::Instant> previous;     // as-of of the night that they compare with
  // Bands and carried smiles by expiry.
  std::map<quotes::Instant, std::vector<publish::ReportBand>> bands;
  std::map<quotes::Instant, quotes::Instant> carried;  // expiry to the as-of it comes from
};

// Gathers, in the order of `marked`, what the comparison with the night before found, as the report
// shows it; of a name that will have no page the largest change alone. Names carried as a whole are
// known from the start.
class ReportChanges {
 public:
  // Refers to `marked`, which must not grow.
  ReportChanges(const std::vector<MarkedUnderlying>& marked, const NightConfig& config,
                const ResolvedNight& night);
  // For write_changes(). `previous` is the as-of of the night before.
  SeenChange taker(quotes::Instant previous);
  const std::vector<ReportExtras>& extras() const { return extras_; }

 private:
  const std::vector<MarkedUnderlying>& marked_;
  bool all_pages_;
  std::vector<ReportExtras> extras_;
};

// Writes report/ into the folder: the index, the pages that the configuration asks for, and what
// they share. Pages are made and written in parallel. `extras` has one an underlying, in the order
// of `marked`, or is empty. Failures are those of RunFolder. `remarks` are shown on the index.
Result<bool> write_report(publish::RunFolder& folder, const quotes::QuoteTable& table,
                          const std::vector<MarkedUnderlying>& marked,
                          const std::vector<ReportExtras>& extras, const NightConfig& config,
                          const ResolvedNight& night, const publish::RunRecord& record,
                          const std::vector<std::string>& remarks);

}  // namespace duskgrid::night
