#include "market/dates.h"

#include <algorithm>
#include <charconv>

namespace duskgrid::market {

std::optional<Tenor> parse_tenor(std::string_view text) {
  if (text.size() < 2 || text.size() > 4) return std::nullopt;
  int count = 0;
  const char* last = text.data() + text.size() - 1;
  const auto [end, error] = std::from_chars(text.data(), last, count);
  if (error != std::errc{} || end != last || count < 1) return std::nullopt;
  switch (*last) {
    case 'd':
    case 'D': return Tenor{count, TenorUnit::day};
    case 'w':
    case 'W': return Tenor{count, TenorUnit::week};
    case 'm':
    case 'M': return Tenor{count, TenorUnit::month};
    case 'y':
    case 'Y': return Tenor{count, TenorUnit::year};
    default: return std::nullopt;
  }
}

quotes::Instant add_tenor(quotes::Instant as_of, const Tenor& tenor, const quotes::Clock& clock) {
  using namespace std::chrono;
  const auto local = as_of + quotes::offset_at(clock, as_of);
  const auto day = floor<days>(local);
  const auto time_of_day = duration_cast<seconds>(local - day);
  year_month_day date{day};
  switch (tenor.unit) {
    case TenorUnit::day: date = day + days{tenor.count}; break;
    case TenorUnit::week: date = day + weeks{tenor.count}; break;
    case TenorUnit::month: date += months{tenor.count}; break;
    case TenorUnit::year: date += years{tenor.count}; break;
  }
  if (!date.ok()) date = date.year() / date.month() / last;
  return quotes::to_instant(clock, date, time_of_day);
}

int business_days(std::chrono::sys_days from, std::chrono::sys_days to,
                  const std::vector<std::chrono::sys_days>& holidays) {
  int count = 0;
  for (auto day = from + std::chrono::days{1}; day <= to; day += std::chrono::days{1}) {
    const std::chrono::weekday weekday{day};
    if (weekday == std::chrono::Saturday || weekday == std::chrono::Sunday) continue;
    if (std::find(holidays.begin(), holidays.end(), day) == holidays.end()) ++count;
  }
  return count;
}

std::chrono::sys_days local_date(quotes::Instant instant, const quotes::Clock& clock) {
  return std::chrono::floor<std::chrono::days>(instant + quotes::offset_at(clock, instant));
}

}  // namespace duskgrid::market
