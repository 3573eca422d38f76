// Tenors. Not for parsing dates: quotes/instants.h.
#pragma once

#include <chrono>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/instants.h"

namespace duskgrid::market {

enum class TenorUnit { day, week, month, year };

struct Tenor {
  int count;  // 1 to 999
  TenorUnit unit;
};

// "2D", "1W", "3M", "10Y", either case; nothing when malformed.
std::optional<Tenor> parse_tenor(std::string_view text);

// The instant as-of plus tenor at the same local time of day on `clock`; months keep the day,
// or take the last of a shorter month. No business-day roll: the date is a point on a
// curve, not a delivery.
quotes::Instant add_tenor(quotes::Instant as_of, const Tenor& tenor, const quotes::Clock& clock);

// Days from `from` (left out) to `to` (counted) that are neither Saturday, Sunday nor a holiday; 0
// where `to` is not later. Holidays in any order. Cost: linear in the days.
int business_days(std::chrono::sys_days from, std::chrono::sys_days to,
                  const std::vector<std::chrono::sys_days>& holidays);

// The local date of an instant.
std::chrono::sys_days local_date(quotes::Instant instant, const quotes::Clock& clock);

}  // namespace duskgrid::market
