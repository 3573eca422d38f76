#include "night/previous.h"

#include <fmt/format.h>
#include <tbb/parallel_for_each.h>

#include <algorithm>
#include <mutex>
#include <utility>

namespace duskgrid::night {

void read_surfaces(publish::PastRun& run, std::vector<std::string>& remarks) {
  std::mutex telling;
  std::vector<std::string> failures;
  tbb::parallel_for_each(run.underlyings.begin(), run.underlyings.end(), [&](auto& entry) {
    auto& [name, past] = entry;
    if (past.record.status == publish::Status::refused) return;
    auto stored = publish::read_past_surface(run, name);
    if (stored) {
      past.stored = std::move(*stored);
      return;
    }
    const std::lock_guard lock(telling);
    failures.push_back(stored.failure().text());
  });
  if (failures.empty()) return;
  std::sort(failures.begin(), failures.end());
  remarks.push_back(fmt::format("surfaces of {} that cannot be read: {}; the first: {}", run.folder,
                                failures.size(), failures.front()));
}

std::optional<publish::PastRun> previous_night(const std::string& out, const ResolvedNight& night,
                                               std::vector<std::string>& remarks) {
  const auto date = quotes::format_date(night.as_of.clock, night.as_of.instant);
  auto run = publish::find_past_run(out, date, night.as_of.instant, remarks);
  if (run) read_surfaces(*run, remarks);
  return run;
}

}  // namespace duskgrid::night
