#include "publish/values.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>

#include "market/day_count.h"
#include "pricing/black.h"

namespace duskgrid::publish {
namespace {

ValueTime listed_time(const surface::Slice& slice) {
  return {slice.expiry, "", slice.year_fraction, {slice.forward, slice.discount_factor}};
}

// An expiry of the surface has its own numbers, others those carried.
ValueTime time_at(const StoredSurface& stored, quotes::Instant instant) {
  for (const auto& slice : stored.surface.slices)
    if (slice.expiry == instant) return listed_time(slice);
  const double t = market::year_fraction(stored.as_of.instant, instant);
  ValueTime time{instant, "", t, {}};
  if (t > 0) time.carried = surface::carried_at(stored.surface, t);
  return time;
}

bool on_date(const StoredSurface& stored, const surface::Slice& slice, const std::string& date) {
  return quotes::format_date(stored.as_of.clock, slice.expiry) == date;
}

}  // namespace

std::vector<ValueTime> listed_times(const StoredSurface& stored) {
  std::vector<ValueTime> times;
  for (const auto& slice : stored.surface.slices) times.push_back(listed_time(slice));
  return times;
}

Result<std::vector<ValueTime>> times_of_expiry(const StoredSurface& stored, std::string_view text) {
  constexpr auto kClose = std::chrono::hours{16};
  const auto& clock = stored.as_of.clock;
  const auto cell = quotes::parse_date_cell(text);
  if (!cell) return Failure{Fault::usage, "", fmt::format("'{}' is not a date or instant", text)};
  const auto instant = quotes::resolve(*cell, clock, kClose);
  std::vector<ValueTime> times;
  if (cell->date && !cell->time_of_day) {
    const std::string date = quotes::format_date(clock, instant);
    for (const auto& slice : stored.surface.slices)
      if (on_date(stored, slice, date)) times.push_back(listed_time(slice));
  }
  if (times.empty()) times.push_back(time_at(stored, instant));
  if (!(times.front().year_fraction > 0))
    return Failure{Fault::usage, "",
                   fmt::format("'{}' is not after the surface's as-of, {}", text,
                               quotes::format_instant(clock, stored.as_of.instant))};
  return times;
}

Result<ValueTime> time_of_tenor(const StoredSurface& stored, std::string_view text) {
  const auto tenor = market::parse_tenor(text);
  if (!tenor)
    return Failure{Fault::usage, "", fmt::format("'{}' is not a tenor such as 2W, 3M, 1Y", text)};
  const auto& as_of = stored.as_of;
  ValueTime time = time_at(stored, market::add_tenor(as_of.instant, *tenor, as_of.clock));
  time.tenor = text;
  return time;
}

std::optional<std::string> problem_of(const ValuePoint& point) {
  constexpr double kMostMoneyness = 20;
  const double v = point.point;
  if (point.axis == Axis::log_moneyness)
    return std::isfinite(v) ? std::nullopt : std::optional<std::string>("must be a number");
  if (!std::isfinite(v) || v <= 0) return "must be a number > 0";
  if (point.axis == Axis::moneyness && v > kMostMoneyness) return "must be K/F: 0.9 and not 90";
  return std::nullopt;
}

ValueRow value_at(const surface::Surface& surface, const surface::TimedSmile& smile,
                  const surface::Carried& carried, const ValuePoint& point) {
  ValueRow row{};
  const double v = point.point;
  if (point.axis == Axis::strike) {
    row.k = -pricing::log_moneyness_of_forward(carried.forward, v);
    row.strike = v;
  } else {
    row.k = point.axis == Axis::moneyness ? std::log(v) : v;
    row.strike = carried.forward * (point.axis == Axis::moneyness ? v : std::exp(v));
  }
  row.support = support_at(surface, smile.year_fraction(), row.k);
  if (std::isfinite(row.k)) row.derived = derived_at(smile, carried, row.k, point.put_call);
  return row;
}

}  // namespace duskgrid::publish
