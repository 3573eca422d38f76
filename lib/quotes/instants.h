// Dates and times as files write them, and as outputs print them. Not for day
// counts or tenors: those are market/.
#pragma once

#include <chrono>
#include <optional>
#include <string>
#include <string_view>

#include "quotes/quote.h"
#include "quotes/result.h"

namespace duskgrid::quotes {

// Where local dates and times are read and written: a zone of the IANA time zone
// database when named, else a fixed offset from UTC.
struct Clock {
  std::string zone;                            // IANA name; empty for the fixed offset
  std::chrono::minutes offset{0};              // used when zone is empty
  std::optional<std::string> problem() const;  // "zone = X, must be ..." or nothing
};

// A local time of day on a date as an instant. A time that a clock change repeats maps
// to the earlier reading, one that it skips to the instant of the change. The clock
// must have no problem().
Instant to_instant(const Clock& clock, std::chrono::year_month_day date,
                   std::chrono::seconds time_of_day);
// Offset of the clock from UTC at an instant.
std::chrono::minutes offset_at(const Clock& clock, Instant instant);
// ISO 8601 with offset, "2031-03-14T16:00:00-05:00"; empty for kNoInstant.
std::string format_instant(const Clock& clock, Instant instant);
// The local date, "2031-03-14"; empty for kNoInstant.
std::string format_date(const Clock& clock, Instant instant);

// What a date cell said, before a clock makes it an instant.
struct DateCell {
  std::optional<std::chrono::year_month_day> date;  // absent for Unix seconds
  std::optional<std::chrono::seconds> time_of_day;  // absent when the cell has only a date
  std::optional<std::chrono::minutes> offset;       // stated in the cell (Z is 0)
  std::optional<Instant> instant;                   // Unix seconds
};

// Reads 2031-06-20, 20310620, 2031-06-20T16:00[:00][Z|+hh:mm|+hhmm], a space for
// the T, Unix seconds (9 to 11 digits), or with a non-empty `format` that format
// alone (strftime letters d m Y y b H M S, %% and literal text; two-digit years are
// 20yy, month names English in any case). A fraction of a second is dropped. Nothing
// when the cell is none of these, the date does not exist or its year is outside
// 1970..2199; day-month order is never guessed.
std::optional<DateCell> parse_date_cell(std::string_view cell, std::string_view format = {});

// Whether parse_date_cell can use a format: "date_format = X, must ..." or nothing.
std::optional<std::string> date_format_problem(std::string_view format);

// The instant of a cell: stated offset, else the clock; a date alone means
// `default_time` of that day.
Instant resolve(const DateCell& cell, const Clock& clock, std::chrono::seconds default_time);

// "16:00" or "09:30:15" as seconds after midnight; nothing when malformed.
std::optional<std::chrono::seconds> parse_time_of_day(std::string_view text);

// The as-of instant and the clock it implies: with a zone configured that zone;
// else the offset written in `text`; else UTC. A date alone means 16:00. Unix seconds are
// refused: one digit too many in a date would be read as an evening of the 1970s.
struct AsOf {
  Instant instant;
  Clock clock;
};
Result<AsOf> parse_as_of(std::string_view text, const std::string& zone);

}  // namespace duskgrid::quotes
