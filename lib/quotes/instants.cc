#include "quotes/instants.h"

#include <date/tz.h>
#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <exception>

namespace duskgrid::quotes {
namespace {

using std::chrono::hours;
using std::chrono::minutes;
using std::chrono::seconds;
using std::chrono::year_month_day;

constexpr seconds kCloseOfDay = hours{16};
// Years a quote file can mean. The bounds also keep every sum of seconds far from overflow.
constexpr int kFirstYear = 1970;
constexpr int kLastYear = 2199;
// ISO 8601 offsets in use reach -12:00 and +14:00; anything past 18 hours is a slip.
constexpr minutes kWidestOffset = hours{18};

bool is_digit(char c) { return c >= '0' && c <= '9'; }

bool is_sound(year_month_day date) {
  const int year = static_cast<int>(date.year());
  return date.ok() && year >= kFirstYear && year <= kLastYear;
}

// Reads a text from the left; each step says whether it could, and moves on only then.
class Scanner {
 public:
  explicit Scanner(std::string_view text) : rest_(text) {}
  bool at_end() const { return rest_.empty(); }

  bool literal(char c) {
    if (rest_.empty() || rest_.front() != c) return false;
    rest_.remove_prefix(1);
    return true;
  }

  // A number of `least` to `most` digits, as many as there are.
  bool digits(std::size_t least, std::size_t most, int& value) {
    std::size_t n = 0;
    int read = 0;
    while (n < most && n < rest_.size() && is_digit(rest_[n]))
      read = 10 * read + (rest_[n++] - '0');
    if (n < least) return false;
    rest_.remove_prefix(n);
    value = read;
    return true;
  }

  // An English month abbreviation in any case, as 1 to 12.
  bool month_name(int& month) {
    constexpr std::string_view kNames = "janfebmaraprmayjunjulaugsepoctnovdec";
    if (rest_.size() < 3) return false;
    std::array<char, 3> low{};
    for (std::size_t i = 0; i < 3; ++i) {
      const char c = rest_[i];
      low[i] = c >= 'A' && c <= 'Z' ? static_cast<char>(c - 'A' + 'a') : c;
    }
    for (std::size_t i = 0; i < 12; ++i) {
      if (kNames.substr(3 * i, 3) != std::string_view(low.data(), 3)) continue;
      month = static_cast<int>(i) + 1;
      rest_.remove_prefix(3);
      return true;
    }
    return false;
  }

  // Whatever digits come next, dropped; true when there was one.
  bool skip_digits() {
    std::size_t n = 0;
    while (n < rest_.size() && is_digit(rest_[n])) ++n;
    rest_.remove_prefix(n);
    return n > 0;
  }

 private:
  std::string_view rest_;
};

// The parts of a date and time as read, -1 for those not there.
struct Parts {
  int year = -1, month = -1, day = -1, hour = -1, minute = -1, second = -1;

  // As a cell, when date and time exist.
  std::optional<DateCell> cell() const {
    if (year < 0 || month < 0 || day < 0) return std::nullopt;
    const year_month_day date{std::chrono::year{year},
                              std::chrono::month{static_cast<unsigned>(month)},
                              std::chrono::day{static_cast<unsigned>(day)}};
    if (!is_sound(date) || hour > 23 || minute > 59 || second > 59) return std::nullopt;
    DateCell read;
    read.date = date;
    if (hour >= 0) {
      read.time_of_day = hours{hour} + minutes{std::max(minute, 0)} + seconds{std::max(second, 0)};
    }
    return read;
  }
};

// hh:mm, or with seconds and a fraction, which is dropped.
bool scan_time(Scanner& scan, std::size_t least_hour_digits, Parts& parts) {
  if (!scan.digits(least_hour_digits, 2, parts.hour) || !scan.literal(':') ||
      !scan.digits(2, 2, parts.minute)) {
    return false;
  }
  if (!scan.literal(':')) return true;
  if (!scan.digits(2, 2, parts.second)) return false;
  return !scan.literal('.') || scan.skip_digits();
}

// Z, +hh:mm or +hhmm. Not the scanner's failure but an empty offset when none is there.
bool scan_offset(Scanner& scan, std::optional<minutes>& offset) {
  if (scan.literal('Z')) {
    offset = minutes{0};
    return true;
  }
  const bool plus = scan.literal('+');
  if (!plus && !scan.literal('-')) return true;
  int hh = 0;
  int mm = 0;
  if (!scan.digits(2, 2, hh)) return false;
  scan.literal(':');
  if (!scan.digits(2, 2, mm) || mm > 59) return false;
  const minutes size = hours{hh} + minutes{mm};
  offset = plus ? size : -size;
  return size <= kWidestOffset;
}

// 2031-06-20, alone or with a time and an offset.
std::optional<DateCell> parse_iso(std::string_view text) {
  Scanner scan(text);
  Parts parts;
  std::optional<minutes> offset;
  if (!scan.digits(4, 4, parts.year) || !scan.literal('-') || !scan.digits(2, 2, parts.month) ||
      !scan.literal('-') || !scan.digits(2, 2, parts.day)) {
    return std::nullopt;
  }
  const bool timed = scan.literal('T') || scan.literal(' ');
  if (timed && !(scan_time(scan, 2, parts) && scan_offset(scan, offset))) return std::nullopt;
  if (!scan.at_end()) return std::nullopt;
  std::optional<DateCell> read = parts.cell();
  if (read) read->offset = offset;
  return read;
}

std::optional<DateCell> parse_unix_seconds(std::string_view text) {
  std::int64_t count = 0;
  for (const char c : text) count = 10 * count + (c - '0');
  const Instant instant{seconds{count}};
  const year_month_day date{std::chrono::floor<std::chrono::days>(instant)};
  if (!is_sound(date)) return std::nullopt;
  DateCell read;
  read.instant = instant;
  return read;
}

std::optional<DateCell> parse_digits(std::string_view text) {
  if (text.size() >= 9 && text.size() <= 11) return parse_unix_seconds(text);
  if (text.size() != 8) return std::nullopt;
  Scanner scan(text);
  Parts parts;
  scan.digits(4, 4, parts.year);
  scan.digits(2, 2, parts.month);
  scan.digits(2, 2, parts.day);
  return parts.cell();
}

// One letter of a format.
bool scan_letter(char letter, Scanner& scan, Parts& parts) {
  switch (letter) {
    case 'd': return scan.digits(1, 2, parts.day);
    case 'm': return scan.digits(1, 2, parts.month);
    case 'b': return scan.month_name(parts.month);
    case 'Y': return scan.digits(4, 4, parts.year);
    case 'y':
      if (!scan.digits(2, 2, parts.year)) return false;
      parts.year += 2000;
      return true;
    case 'H': return scan.digits(1, 2, parts.hour);
    case 'M': return scan.digits(1, 2, parts.minute);
    case 'S': return scan.digits(1, 2, parts.second);
    case '%': return scan.literal('%');
    default: return false;
  }
}

std::optional<DateCell> parse_with_format(std::string_view text, std::string_view format) {
  Scanner scan(text);
  Parts parts;
  for (std::size_t i = 0; i < format.size(); ++i) {
    const bool is_letter = format[i] == '%' && i + 1 < format.size();
    const bool read = is_letter ? scan_letter(format[++i], scan, parts) : scan.literal(format[i]);
    if (!read) return std::nullopt;
  }
  return scan.at_end() ? parts.cell() : std::nullopt;
}

// A clock without a problem has a zone that is there; for another one this throws,
// which the top of a program reports as the bug it is.
const date::time_zone& find_zone(const Clock& clock) { return *date::locate_zone(clock.zone); }

// Compiled zone files list clock changes up to 2037 and leave later ones to a rule that
// the zone library does not read: it would have no summer time from 2038 on. The rules
// go by month and weekday, so a later date behaves like the same day of the month in
// the latest listed year where it falls on the same weekday.
constexpr int kLastListedYear = 2037;
constexpr int kCalendarCycle = 28;  // years in which every date meets every weekday

// How far back the like date lies; 0 for dates that are listed themselves.
std::chrono::days back_to_listed(year_month_day date) {
  if (static_cast<int>(date.year()) <= kLastListedYear) return std::chrono::days{0};
  const std::chrono::sys_days day{date};
  for (int year = kLastListedYear; year > kLastListedYear - kCalendarCycle; --year) {
    const year_month_day like{std::chrono::year{year}, date.month(), date.day()};
    if (!like.ok()) continue;
    const std::chrono::days back = day - std::chrono::sys_days{like};
    if (back.count() % 7 == 0) return back;
  }
  return std::chrono::days{0};
}

// Some zones do list later changes (those that follow a lunar calendar); they are
// exhausted only when the entry that holds an instant has no end.
bool is_listed(const date::time_zone& zone, Instant instant) {
  return zone.get_info(instant).end <
         Instant{std::chrono::sys_days{std::chrono::year{kLastYear + 1} / 1 / 1}};
}

seconds since_epoch(year_month_day date) { return std::chrono::sys_days{date}.time_since_epoch(); }

}  // namespace

std::optional<std::string> Clock::problem() const {
  if (zone.empty()) {
    if (offset >= -kWidestOffset && offset <= kWidestOffset) return std::nullopt;
    return fmt::format("offset = {} minutes, must be from -18:00 to +18:00", offset.count());
  }
  try {
    // Asking for an instant reads the zone's file, which may be there and damaged.
    date::locate_zone(zone)->get_info(Instant{});
    return std::nullopt;
  } catch (const std::exception&) {
    return fmt::format(
        "zone = {}, must be a name of the IANA time zone database, such as Europe/Paris", zone);
  }
}

Instant to_instant(const Clock& clock, year_month_day date, seconds time_of_day) {
  const seconds local = since_epoch(date) + time_of_day;
  if (clock.zone.empty()) return Instant{local - clock.offset};
  const date::time_zone& zone = find_zone(clock);
  std::chrono::days back = back_to_listed(date);
  if (back.count() > 0 && is_listed(zone, Instant{local})) back = std::chrono::days{0};
  return zone.to_sys(date::local_seconds{local - back}, date::choose::earliest) + back;
}

minutes offset_at(const Clock& clock, Instant instant) {
  if (clock.zone.empty()) return clock.offset;
  const date::time_zone& zone = find_zone(clock);
  std::chrono::days back = back_to_listed(std::chrono::floor<std::chrono::days>(instant));
  if (back.count() > 0 && is_listed(zone, instant)) back = std::chrono::days{0};
  return std::chrono::duration_cast<minutes>(zone.get_info(instant - back).offset);
}

std::string format_instant(const Clock& clock, Instant instant) {
  if (instant == kNoInstant) return {};
  const minutes offset = offset_at(clock, instant);
  const Instant local = instant + offset;
  const seconds of_day = local - std::chrono::floor<std::chrono::days>(local);
  const auto size = std::chrono::abs(offset).count();
  return fmt::format("{}T{:02}:{:02}:{:02}{}{:02}:{:02}", format_date(clock, instant),
                     of_day.count() / 3600, of_day.count() / 60 % 60, of_day.count() % 60,
                     offset.count() < 0 ? '-' : '+', size / 60, size % 60);
}

std::string format_date(const Clock& clock, Instant instant) {
  if (instant == kNoInstant) return {};
  const Instant local = instant + offset_at(clock, instant);
  const year_month_day date{std::chrono::floor<std::chrono::days>(local)};
  return fmt::format("{:04}-{:02}-{:02}", static_cast<int>(date.year()),
                     static_cast<unsigned>(date.month()), static_cast<unsigned>(date.day()));
}

std::optional<DateCell> parse_date_cell(std::string_view cell, std::string_view format) {
  if (!format.empty()) return parse_with_format(cell, format);
  const bool only_digits = cell.find_first_not_of("0123456789") == std::string_view::npos;
  return only_digits ? parse_digits(cell) : parse_iso(cell);
}

std::optional<std::string> date_format_problem(std::string_view format) {
  std::string letters;
  for (std::size_t i = 0; i < format.size(); ++i) {
    if (format[i] != '%') continue;
    letters += ++i < format.size() ? format[i] : '?';
  }
  const auto has = [&](std::string_view any) {
    return letters.find_first_of(any) != std::string::npos;
  };
  const bool known = letters.find_first_not_of("dmYybHMS%") == std::string::npos;
  if (known && has("d") && has("mb") && has("Yy") && (has("H") || !has("MS"))) return std::nullopt;
  return fmt::format(
      "date_format = {}, must hold %d, %m or %b, and %Y or %y; %H %M %S may follow, nothing else",
      format);
}

Instant resolve(const DateCell& cell, const Clock& clock, seconds default_time) {
  if (cell.instant) return *cell.instant;
  const seconds time = cell.time_of_day.value_or(default_time);
  if (cell.offset) return Instant{since_epoch(*cell.date) + time - *cell.offset};
  return to_instant(clock, *cell.date, time);
}

std::optional<seconds> parse_time_of_day(std::string_view text) {
  Scanner scan(text);
  Parts parts;
  if (!scan_time(scan, 1, parts) || !scan.at_end()) return std::nullopt;
  if (parts.hour > 23 || parts.minute > 59 || parts.second > 59) return std::nullopt;
  return hours{parts.hour} + minutes{parts.minute} + seconds{std::max(parts.second, 0)};
}

Result<AsOf> parse_as_of(std::string_view text, const std::string& zone) {
  Clock clock{zone, minutes{0}};
  if (const auto problem = clock.problem()) return Failure{Fault::configuration, "zone", *problem};
  const std::optional<DateCell> cell = parse_date_cell(text);
  if (!cell || !cell->date) {
    return Failure{Fault::usage, "as-of",
                   fmt::format("\"{}\" is not a date and time; write 2031-03-14, or "
                               "2031-03-14T16:00:00-05:00 with a time and its offset from UTC",
                               text)};
  }
  if (zone.empty()) clock.offset = cell->offset.value_or(minutes{0});
  return AsOf{resolve(*cell, clock, kCloseOfDay), clock};
}

}  // namespace duskgrid::quotes
