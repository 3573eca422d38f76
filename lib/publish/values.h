// A stored surface asked at times and points: what `duskgrid value` prints. Not for the nodes of a
// night's grid: grid.h.
#pragma once

#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "publish/grid.h"
#include "publish/surface_json.h"
#include "surface/derived.h"

namespace duskgrid::publish {

struct ValueTime {
  quotes::Instant expiry;
  std::string tenor;     // as asked; empty for a date
  double year_fraction;  // > 0
  surface::Carried carried;
};

// The expiries of the surface.
std::vector<ValueTime> listed_times(const StoredSurface& stored);
// A date or instant as parse_date_cell() reads it. A date alone means every expiry of the surface
// on that local date, and 16:00 of it where there is none. Failure (usage): neither, or not after
// the as-of.
Result<std::vector<ValueTime>> times_of_expiry(const StoredSurface& stored, std::string_view text);
// As-of plus tenor. Failure (usage): not a tenor.
Result<ValueTime> time_of_tenor(const StoredSurface& stored, std::string_view text);

// Strike, moneyness or log_moneyness: the axes on which values are asked.
struct ValuePoint {
  Axis axis;
  double point;
  std::optional<quotes::PutCall> put_call = {};  // the side out of the money without it
};
// What is wrong with a point, if anything.
std::optional<std::string> problem_of(const ValuePoint& point);

struct ValueRow {
  double strike;  // as asked, where a strike was
  double k;       // ln(strike / forward)
  std::optional<surface::Derived> derived;
  Support support;  // extrapolated or interpolated
};
// `smile` is one of `surface`.
ValueRow value_at(const surface::Surface& surface, const surface::TimedSmile& smile,
                  const surface::Carried& carried, const ValuePoint& point);

}  // namespace duskgrid::publish
