#include "make_night_market.h"

#include <fmt/format.h>

#include <array>
#include <cmath>

namespace duskgrid::make_night {
namespace {

namespace chrono = std::chrono;

std::uint64_t scramble(std::uint64_t z) {
  z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9U;
  z = (z ^ (z >> 27)) * 0x94d049bb133111ebU;
  return z ^ (z >> 31);
}

// FNV-1a: only has to tell names apart.
std::uint64_t hash(std::string_view text) {
  std::uint64_t h = 0xcbf29ce484222325U;
  for (const char c : text) h = (h ^ static_cast<unsigned char>(c)) * 0x100000001b3U;
  return h;
}

std::optional<int> digits(std::string_view text) {
  int value = 0;
  for (const char c : text) {
    if (c < '0' || c > '9') return std::nullopt;
    value = 10 * value + (c - '0');
  }
  return value;
}

double normal_cdf(double x) { return 0.5 * std::erfc(-x / std::sqrt(2.0)); }

chrono::seconds settled_at(Settled settled) {
  return settled == Settled::morning ? chrono::hours{9} + chrono::minutes{30} : chrono::hours{16};
}

Date third_friday_of(chrono::year_month month) {
  return chrono::year_month_day{chrono::sys_days{month / chrono::Friday[3]}};
}

}  // namespace

Stream::Stream(std::uint64_t seed, std::string_view name) : counter_(scramble(seed + hash(name))) {}

std::uint64_t Stream::next() {
  counter_ += 0x9e3779b97f4a7c15U;
  return scramble(counter_);
}

double Stream::uniform() { return static_cast<double>(next() >> 11) * 0x1p-53; }

double Stream::triangular() {
  // Bounded noise keeps the fair price inside its spread, and needs no function whose
  // last digit differs between machines, as a normal variate would.
  const double first = uniform();
  return first - uniform();
}

std::int64_t Stream::between(std::int64_t lowest, std::int64_t highest) {
  return lowest +
         static_cast<std::int64_t>(next() % static_cast<std::uint64_t>(highest - lowest + 1));
}

std::optional<AsOf> parse_as_of(std::string_view text) {
  constexpr std::string_view kShape = "dddd-dd-ddTdd:dd:dd?dd:dd";
  if (text.size() != kShape.size()) return std::nullopt;
  for (std::size_t i = 0; i < text.size(); ++i) {
    if (kShape[i] != 'd' && kShape[i] != '?' && text[i] != kShape[i]) return std::nullopt;
  }
  std::array<int, 8> part{};
  constexpr std::array<std::pair<int, int>, 8> kPlaces{
      {{0, 4}, {5, 2}, {8, 2}, {11, 2}, {14, 2}, {17, 2}, {20, 2}, {23, 2}}};
  for (std::size_t i = 0; i < part.size(); ++i) {
    const auto value = digits(text.substr(kPlaces[i].first, kPlaces[i].second));
    if (!value) return std::nullopt;
    part[i] = *value;
  }
  const Date date{chrono::year{part[0]}, chrono::month{static_cast<unsigned>(part[1])},
                  chrono::day{static_cast<unsigned>(part[2])}};
  const char sign = text[19];
  if (!date.ok() || part[3] > 23 || part[4] > 59 || part[5] > 59 || part[6] > 14 || part[7] > 59 ||
      (sign != '+' && sign != '-')) {
    return std::nullopt;
  }
  const auto offset = chrono::hours{part[6]} + chrono::minutes{part[7]};
  return AsOf{std::string(text), chrono::sys_days{date},
              chrono::hours{part[3]} + chrono::minutes{part[4]} + chrono::seconds{part[5]},
              sign == '-' ? -offset : offset};
}

AsOf next_business_day(const AsOf& as_of) {
  AsOf next = as_of;
  const Date date = days_ahead(as_of, 1);
  next.date = chrono::sys_days{date};
  next.text = iso_date(date) + as_of.text.substr(iso_date(date).size());
  return next;
}

std::int64_t unix_seconds(const AsOf& as_of) {
  return chrono::seconds{as_of.date.time_since_epoch() + as_of.time_of_day - as_of.offset}.count();
}

Date third_friday(const AsOf& as_of, int count) {
  const Date today{as_of.date};
  chrono::year_month first = today.year() / today.month();
  if (chrono::sys_days{third_friday_of(first)} <= as_of.date) first += chrono::months{1};
  return third_friday_of(first + chrono::months{count});
}

Date days_ahead(const AsOf& as_of, int days) {
  chrono::sys_days date = as_of.date + chrono::days{days};
  while (chrono::weekday{date} == chrono::Saturday || chrono::weekday{date} == chrono::Sunday) {
    date += chrono::days{1};
  }
  return Date{date};
}

Date months_ahead(const AsOf& as_of, int months) {
  const Date date = Date{as_of.date} + chrono::months{months};
  return date.ok() ? date : Date{date.year() / date.month() / chrono::last};
}

double year_fraction(const AsOf& as_of, const Expiry& expiry) {
  const chrono::seconds left = (chrono::sys_days{expiry.date} - as_of.date) +
                               (settled_at(expiry.settled) - as_of.time_of_day);
  return static_cast<double>(left.count()) / (365.0 * 86400.0);
}

double total_variance(const Smile& smile, double t, double log_moneyness) {
  const double first = smile.vol_short * smile.vol_short;
  const double last = smile.vol_long * smile.vol_long;
  const double theta = last * t + (first - last) * (1 - std::exp(-smile.speed * t)) / smile.speed;
  const double phi = smile.bend / std::sqrt(theta * (1 + theta));
  const double x = phi * log_moneyness + smile.skew;
  return 0.5 * theta *
         (1 + smile.skew * phi * log_moneyness + std::sqrt(x * x + 1 - smile.skew * smile.skew));
}

Terms terms_of(const AsOf& as_of, const RateCurve& rates, const Name& name, const Expiry& expiry) {
  const double t = year_fraction(as_of, expiry);
  const double rate = rates.zero_rate(t);
  double cents = static_cast<double>(name.spot) * std::exp((rate - name.carry) * t);
  if (name.futures) cents = std::round(cents);
  return Terms{t, cents / 100, std::exp(-rate * t), std::sqrt(total_variance(name.smile, t, 0.0))};
}

double black(Side side, const Terms& terms, double strike, double w) {
  // The out-of-the-money side first, the other by parity: no cancellation in the wings.
  const double v = std::sqrt(w);
  const double d1 = std::log(terms.forward / strike) / v + 0.5 * v;
  const bool call_is_out = strike >= terms.forward;
  const double out = call_is_out ? terms.forward * normal_cdf(d1) - strike * normal_cdf(d1 - v)
                                 : strike * normal_cdf(v - d1) - terms.forward * normal_cdf(-d1);
  const bool wanted_is_out = (side == Side::call) == call_is_out;
  const double intrinsic = wanted_is_out ? 0.0 : std::fabs(terms.forward - strike);
  return terms.discount * (out + intrinsic);
}

std::string iso_date(const Date& date) {
  return fmt::format("{:04}-{:02}-{:02}", static_cast<int>(date.year()),
                     static_cast<unsigned>(date.month()), static_cast<unsigned>(date.day()));
}

std::string compact_date(const Date& date) {
  return fmt::format("{:04}{:02}{:02}", static_cast<int>(date.year()),
                     static_cast<unsigned>(date.month()), static_cast<unsigned>(date.day()));
}

std::string worded_date(const Date& date) {
  constexpr std::array<std::string_view, 12> kMonths{"Jan", "Feb", "Mar", "Apr", "May", "Jun",
                                                     "Jul", "Aug", "Sep", "Oct", "Nov", "Dec"};
  return fmt::format("{:02} {} {:04}", static_cast<unsigned>(date.day()),
                     kMonths[static_cast<unsigned>(date.month()) - 1],
                     static_cast<int>(date.year()));
}

std::string decimals(Cents value, char point) {
  return fmt::format("{}{}{:02}", value / 100, point, value % 100);
}

std::string grouped(Cents value) {
  std::string text = decimals(value);
  for (std::size_t place = text.size() - 3; place > 3; place -= 3) text.insert(place - 3, 1, ',');
  return text;
}

}  // namespace duskgrid::make_night
