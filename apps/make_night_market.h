// The invented world that make_night quotes: dates, rates, smiles and fair prices.
// Written apart from the library on purpose, so that a test comparing both compares
// two independent sources. Not for bids and asks: make_night_quotes.h.
#pragma once

#include <chrono>
#include <compare>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

namespace duskgrid::make_night {

using Date = std::chrono::year_month_day;
using Cents = std::int64_t;  // hundredths of the quote currency: exact to add and to print

// Random numbers that are the same on every machine: a counter through the SplitMix64
// finaliser. One stream a purpose, keyed by its name, so that what is added to one
// file or name moves no other.
class Stream {
 public:
  Stream(std::uint64_t seed, std::string_view name);
  std::uint64_t next();
  double uniform();                                                 // [0, 1), exact
  double triangular();                                              // (-1, 1), mean 0, exact
  std::int64_t between(std::int64_t lowest, std::int64_t highest);  // both included

 private:
  std::uint64_t counter_;
};

// The instant the night is taken at, with the local clock it implies.
struct AsOf {
  std::string text;  // as stated
  std::chrono::sys_days date;
  std::chrono::seconds time_of_day{0};
  std::chrono::minutes offset{0};
};
// Reads the one form "2031-03-14T16:00:00-05:00"; nothing for any other text.
std::optional<AsOf> parse_as_of(std::string_view text);
// The same time of day on the next day that is no weekend.
AsOf next_business_day(const AsOf& as_of);
// Seconds since 1970 in UTC.
std::int64_t unix_seconds(const AsOf& as_of);

enum class Settled : std::uint8_t { morning, afternoon };  // 09:30 and 16:00 local
struct Expiry {
  Date date;
  Settled settled = Settled::afternoon;
  auto operator<=>(const Expiry&) const = default;
};
// The third Friday `count` months after the first one that follows the as-of date;
// -1 is the last one before it or on it.
Date third_friday(const AsOf& as_of, int count);
// So many days ahead, moved on to Monday from a weekend.
Date days_ahead(const AsOf& as_of, int days);
// The as-of date so many months ahead, the last day of a shorter month.
Date months_ahead(const AsOf& as_of, int months);
// ACT/365F from the as-of to the expiry instant.
double year_fraction(const AsOf& as_of, const Expiry& expiry);

// Continuous zero rate, a straight line in time.
struct RateCurve {
  double now = 0.0296;
  double slope = 0.0012;  // per year
  double zero_rate(double t) const { return now + slope * t; }
};

// Surface SVI (Gatheral & Jacquier 2014, section 4): theta(t) is the total variance at
// the money, phi = bend / sqrt(theta (1 + theta)). Free of butterfly arbitrage while
// bend (1 + |skew|) <= 2, and of calendar arbitrage while theta rises.
struct Smile {
  double vol_short = 0.2;  // at the money, at once
  double vol_long = 0.2;   // at the money, in the far future
  double speed = 1.5;      // how fast the first turns into the second, per year
  double skew = -0.5;      // in (-1, 1)
  double bend = 1.0;       // 0 gives one volatility for every strike
};
double total_variance(const Smile& smile, double t, double log_moneyness);

struct Name {
  std::string code;
  Cents spot = 0;
  double carry = 0;  // continuous dividend or other yield
  Smile smile;
  bool futures = false;  // options on a future, whose price is a whole number of cents
};

// What one expiry of one name is worth.
struct Terms {
  double t;
  double forward;
  double discount;
  double deviation;  // square root of the total variance at the money
};
Terms terms_of(const AsOf& as_of, const RateCurve& rates, const Name& name, const Expiry& expiry);

enum class Side : std::uint8_t { call, put };
// Black (1976) with total variance w, in quote currency.
double black(Side side, const Terms& terms, double strike, double w);

std::string iso_date(const Date& date);               // 2031-06-20
std::string compact_date(const Date& date);           // 20310620
std::string worded_date(const Date& date);            // 20 Jun 2031
std::string decimals(Cents value, char point = '.');  // 1250.00
std::string grouped(Cents value);                     // 1,250.00

}  // namespace duskgrid::make_night
