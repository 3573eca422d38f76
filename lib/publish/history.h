// The history of an output folder: one SQLite database over all its nights, for series and for what
// is usual. Tables are described in docs/history.md. Not a copy of the run folders, which stay what
// a night published.
#pragma once

#include <chrono>
#include <cstdint>
#include <map>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "publish/compare.h"
#include "publish/run_record.h"
#include "surface/surface.h"

namespace duskgrid::publish {

// One expiry of one night.
struct HistorySlice {
  quotes::Instant expiry;
  double year_fraction;
  double forward, discount_factor;
  double vol;        // at the forward (k = 0), decimals a year
  double skew;       // dvol/dk there, k = ln(K/F)
  double curvature;  // d2vol/dk2 there
  std::int64_t used = 0, inside = 0;
  double rms_vol = quotes::kAbsent;
};
// Without the fit quality.
HistorySlice history_slice(const surface::Slice& slice);

// At-the-money volatility of the surface at a year less that at a quarter, over 0.75 years.
double term_slope(const surface::Surface& surface);

// The same at any time, from the slices alone: total variance at the forward and its derivatives in
// k are linear in time between slices, proportional to it before the first; after the last,
// variance grows as at the forward there. Forward and discount factor as surface::carried_at()
// without a spot. Nothing without slices. `used`, `inside` and `rms_vol` are empty.
std::optional<HistorySlice> at_maturity(const std::vector<HistorySlice>& slices,
                                        quotes::Instant expiry, double year_fraction);

struct HistoryUnderlying {
  UnderlyingRecord record;  // `slices` is not kept: they are counted
  double term_slope = quotes::kAbsent;
  std::vector<HistorySlice> slices;  // by expiry
  std::string surface;               // as packed_surface() gives it; empty for none
};
// The JSON of a surface in the form in which the history keeps it: a zstd frame.
std::string packed_surface(const std::string& json);

struct HistoryNight {
  std::string date;  // local date of the as-of, 2031-03-14: what names a night
  quotes::AsOf as_of;
  std::string version;  // of the program
  std::vector<HistoryUnderlying> underlyings;
};

class History {
 public:
  enum class Access { read, write };  // write makes what is not there
  static constexpr const char* kFileName = "history.sqlite";
  static constexpr int kSchema = 2;

  // Waits so long for a lock of another process. An older schema is brought up to this one in a
  // transaction. Failures (no_input for reading, cannot_create for writing) say which: missing,
  // cannot be opened, locked, damaged, not a history, of a newer schema.
  static Result<std::unique_ptr<History>> open(
      const std::string& path, Access access,
      std::chrono::milliseconds wait = std::chrono::seconds{5});
  ~History();
  History(const History&) = delete;
  History& operator=(const History&) = delete;

  // Puts a night in, in place of what was there of its date: all of it or, on failure, nothing.
  Result<bool> write_night(const HistoryNight& night);

  // Nights of an underlying from one date to another (both included; either may be empty), by date.
  // Each has one underlying, without its surface.
  Result<std::vector<HistoryNight>> series(const std::string& underlying, const std::string& from,
                                           const std::string& to);
  // The JSON of a night's surface as it was published; nothing when it has none.
  Result<std::optional<std::string>> surface(const std::string& date,
                                             const std::string& underlying);
  // At-the-money volatilities of the last `most` nights before a date, by underlying: a night each
  // by date, those where it was neither carried nor refused.
  Result<std::map<std::string, TermNights>> terms(const std::string& before_date, int most);

 private:
  struct Database;
  explicit History(std::unique_ptr<Database> database);
  std::unique_ptr<Database> database_;
};

}  // namespace duskgrid::publish
