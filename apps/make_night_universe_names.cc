#include "make_night_universe_names.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <set>

#include "pricing/black.h"
#include "pricing/invert.h"

namespace duskgrid::make_night {
namespace {

namespace chrono = std::chrono;

struct Range {
  double low, high;
  double draw(Stream& random) const { return low + (high - low) * random.uniform(); }
  std::int64_t whole(Stream& random) const {
    return random.between(static_cast<std::int64_t>(low), static_cast<std::int64_t>(high));
  }
};

// How the names of a kind are. Shares of all names sum to 1.
struct KindRule {
  std::string_view word;
  double share;
  Range expiries, strikes;
  Range spot;  // quote currency, drawn evenly in its logarithm
  Range vol;   // at the money
  Range carry;
  SpreadRule spread;
};

constexpr std::array<KindRule, 8> kRules{{
    {"index",
     0.001,
     {30, 40},
     {100, 140},
     {800, 9000},
     {0.12, 0.22},
     {0.01, 0.02},
     {0.05, 0.004, 0.10, {5, 10, 300}}},
    {"large",
     0.08,
     {10, 14},
     {36, 60},
     {40, 900},
     {0.18, 0.45},
     {0, 0.02},
     {0.02, 0.006, 0.12, {1, 5, 300}}},
    {"medium",
     0.27,
     {6, 9},
     {16, 28},
     {15, 300},
     {0.25, 0.6},
     {0, 0.03},
     {0.04, 0.012, 0.15, {1, 5, 300}}},
    {"small",
     0.44,
     {4, 6},
     {8, 14},
     {8, 80},
     {0.35, 0.9},
     {0, 0.02},
     {0.05, 0.025, 0.15, {5, 5, 300}}},
    {"payer",
     0.12,
     {7, 12},
     {20, 40},
     {20, 250},
     {0.15, 0.35},
     {0, 0},
     {0.03, 0.010, 0.15, {1, 5, 300}}},
    {"hard-to-borrow",
     0.03,
     {5, 9},
     {14, 24},
     {8, 60},
     {0.6, 1.2},
     {0.08, 0.4},
     {0.04, 0.020, 0.15, {1, 5, 300}}},
    {"event",
     0.03,
     {8, 12},
     {24, 40},
     {30, 300},
     {0.25, 0.5},
     {0, 0.01},
     {0.02, 0.008, 0.12, {1, 5, 300}}},
    {"dead", 0.029, {4, 5}, {8, 10}, {2, 10}, {0.6, 1.0}, {0, 0}, {0.50, 0.100, 0.15, {5, 5, 300}}},
}};

const KindRule& rule_of(Kind kind) { return kRules[static_cast<std::size_t>(kind)]; }

constexpr std::int64_t kFewestStrikes = 4;

// Every kind in its share, each at least once where there are names enough, the rare ones first.
std::vector<Kind> kinds_of(std::int64_t underlyings) {
  std::vector<Kind> kinds;
  for (std::size_t i = 0; i < kRules.size(); ++i) {
    const auto wanted =
        std::max<std::int64_t>(1, std::llround(kRules[i].share * static_cast<double>(underlyings)));
    kinds.insert(kinds.end(), static_cast<std::size_t>(wanted), static_cast<Kind>(i));
  }
  const auto count = static_cast<std::size_t>(underlyings);
  while (kinds.size() > count) {
    const auto common = std::find(kinds.rbegin(), kinds.rend(), Kind::small);
    kinds.erase(common == kinds.rend() ? kinds.end() - 1 : common.base() - 1);
  }
  kinds.resize(count, Kind::small);
  return kinds;
}

// X and five letters without vowels, so that no word comes out; different for different numbers
// below 20^5, since the factor has no divisor in common with it.
std::string code_of(std::int64_t number) {
  constexpr std::string_view kLetters = "BCDFGHJKLMNPQRSTVWYZ";
  constexpr std::uint64_t kCodes = 3'200'000, kFactor = 1'234'567;
  auto at = static_cast<std::uint64_t>(number) * kFactor % kCodes;
  std::string code = "X";
  for (int i = 0; i < 5; ++i, at /= kLetters.size()) code += kLetters[at % kLetters.size()];
  return code;
}

// A third of them weekly, and daily ones before for an index; the rest monthly, then quarterly.
std::vector<Expiry> expiries_of(const AsOf& as_of, Kind kind, std::int64_t count) {
  constexpr std::array<int, 16> kMonths{0, 1, 2, 3, 5, 8, 11, 14, 17, 20, 23, 26, 29, 32, 35, 38};
  std::set<Expiry> dates;
  const auto wanted = static_cast<std::size_t>(count);
  const std::size_t monthly = std::min(kMonths.size(), wanted - wanted / 3);
  for (std::size_t i = 0; i < monthly; ++i) dates.insert({third_friday(as_of, kMonths[i])});
  if (kind == Kind::index)
    for (int day = 1; day <= 10 && dates.size() < wanted; ++day)
      dates.insert({days_ahead(as_of, day)});
  const auto friday = as_of.date + (chrono::Friday - chrono::weekday{as_of.date});
  for (int week = 1; dates.size() < wanted; ++week)
    dates.insert({Date{friday + chrono::days{7 * week}}});
  return {dates.begin(), dates.end()};
}

Smile smile_of(const KindRule& rule, Kind kind, Stream& random) {
  Smile smile;
  smile.vol_long = rule.vol.draw(random);
  smile.vol_short = smile.vol_long * Range{0.75, 1.35}.draw(random);
  smile.speed = Range{0.8, 3}.draw(random);
  smile.skew = (kind == Kind::index ? Range{-0.7, -0.5} : Range{-0.55, -0.05}).draw(random);
  smile.bend = Range{0.4, 0.9}.draw(random);
  // Around an event the two lognormals make the smile.
  if (kind == Kind::event) smile.bend = 0;
  return smile;
}

EventJump event_of(const AsOf& as_of, Stream& random) {
  const double size = Range{0.05, 0.12}.draw(random), chance = Range{0.4, 0.6}.draw(random);
  const double up = 1 + 2 * size * (1 - chance);
  return {days_ahead(as_of, static_cast<int>(random.between(9, 16))), up,
          (1 - chance * up) / (1 - chance), chance};
}

// Every quarter, somewhere in the first one on a Wednesday, until after the last expiry.
std::vector<CashDividend> dividends_of(const AsOf& as_of, Cents spot, Stream& random) {
  constexpr int kQuarters = 18;
  const double yearly = Range{0.02, 0.06}.draw(random);
  const auto amount = std::llround(yearly / 4 * static_cast<double>(spot));
  const auto wednesday = as_of.date + (chrono::Wednesday - chrono::weekday{as_of.date});
  const auto first = wednesday + chrono::days{7 * random.between(0, 12)};
  std::vector<CashDividend> dividends;
  for (int i = 0; i < kQuarters; ++i)
    dividends.push_back({Date{first + chrono::days{91 * i}}, std::max<Cents>(1, amount)});
  return dividends;
}

ListedName list_name(const World& world, std::int64_t number, Kind kind) {
  const KindRule& rule = rule_of(kind);
  ListedName listed{kind, {}, rule.spread, {}, {}, {}};
  listed.name.code = code_of(number);
  Stream random(world.seed, listed.name.code);
  const double spot = rule.spot.low * std::pow(rule.spot.high / rule.spot.low, random.uniform());
  listed.name.spot = std::llround(100 * spot);
  listed.name.carry = rule.carry.draw(random);
  listed.name.smile = smile_of(rule, kind, random);
  // The bases are for a spot of 100.
  listed.spread.base *= std::clamp(spot / 100, 0.5, 40.0);
  if (kind == Kind::event) listed.event = event_of(world.as_of, random);
  if (kind == Kind::payer) listed.dividends = dividends_of(world.as_of, listed.name.spot, random);
  for (const Expiry& expiry : expiries_of(world.as_of, kind, rule.expiries.whole(random)))
    listed.slices.push_back({expiry, rule.strikes.whole(random)});
  return listed;
}

// Scales the numbers of strikes to the sum asked; what rounding leaves goes one each to the slices
// in turn.
void fit_strikes(std::vector<ListedName>& names, std::int64_t pairs) {
  std::vector<std::int64_t*> counts;
  for (ListedName& listed : names)
    for (ListedSlice& slice : listed.slices) counts.push_back(&slice.strikes);
  double sum = 0;
  for (const auto* count : counts) sum += static_cast<double>(*count);
  const double scale = static_cast<double>(pairs) / sum;
  std::int64_t left = pairs;
  for (auto* count : counts) {
    *count =
        std::max<std::int64_t>(kFewestStrikes, std::llround(scale * static_cast<double>(*count)));
    left -= *count;
  }
  for (bool moved = true; left != 0 && moved;) {
    moved = false;
    for (auto* count : counts) {
      const std::int64_t step = left > 0 ? 1 : left < 0 && *count > kFewestStrikes ? -1 : 0;
      *count += step;
      left -= step;
      moved = moved || step != 0;
    }
  }
}

// Black's undiscounted price of one lognormal of forward 1.
double call_of_one(double forward, double strike, double w) {
  return black(Side::call, {0, forward, 1, 0}, strike, w);
}

// Of a mixture, by the price of the side out of the money: the other has no digits left of it.
double mixture_variance(const EventJump& event, double base, double k) {
  const double strike = std::exp(k);
  double price = event.chance * call_of_one(event.up, strike, base) +
                 (1 - event.chance) * call_of_one(event.down, strike, base);
  if (k < 0) {
    price = event.chance * black(Side::put, {0, event.up, 1, 0}, strike, base) +
            (1 - event.chance) * black(Side::put, {0, event.down, 1, 0}, strike, base);
  }
  const auto side = k < 0 ? quotes::PutCall::put : quotes::PutCall::call;
  const auto found = pricing::implied_vol({side, 1, strike, 1}, price, 1);
  return found.vol * found.vol;
}

// 1, 2, 2.5 or 5 times a power of ten, in cents: the first at or above `width`.
Cents round_step(double width) {
  for (Cents power = 10;; power *= 10)
    for (const Cents times : {10, 20, 25, 50})
      if (const Cents step = power * times / 10; static_cast<double>(step) >= width) return step;
}

}  // namespace

std::string_view word(Kind kind) { return rule_of(kind).word; }

std::vector<ListedName> list_universe(const World& world, std::int64_t underlyings,
                                      std::int64_t pairs) {
  std::vector<ListedName> names;
  for (const Kind kind : kinds_of(underlyings))
    names.push_back(list_name(world, static_cast<std::int64_t>(names.size()) + 1, kind));
  // Kinds are mixed in the files, as codes are.
  std::sort(names.begin(), names.end(),
            [](const auto& a, const auto& b) { return a.name.code < b.name.code; });
  fit_strikes(names, pairs);
  return names;
}

double carry_to(const ListedName& listed, const AsOf& as_of, const RateCurve& rates,
                const Expiry& expiry) {
  const double spot = static_cast<double>(listed.name.spot);
  double left = spot;
  for (const CashDividend& dividend : listed.dividends) {
    if (dividend.ex > expiry.date) break;
    // Ex at the start of the day.
    const double t =
        static_cast<double>((chrono::sys_days{dividend.ex} - as_of.date).count()) / 365 -
        static_cast<double>(as_of.time_of_day.count()) / (365.0 * 86400);
    left -= static_cast<double>(dividend.amount) * std::exp(-rates.zero_rate(t) * t);
  }
  return listed.name.carry - std::log(left / spot) / year_fraction(as_of, expiry);
}

double total_variance(const ListedName& listed, const AsOf& as_of, const Expiry& expiry,
                      double log_moneyness) {
  const double base =
      total_variance(listed.name.smile, year_fraction(as_of, expiry), log_moneyness);
  const bool ahead = listed.event && expiry.date >= listed.event->date;
  return ahead ? mixture_variance(*listed.event, base, log_moneyness) : base;
}

std::vector<Cents> listed_strikes(const Terms& terms, std::int64_t count) {
  constexpr double kDeviations = 2.6;
  const double half =
      100 * terms.forward * std::expm1(kDeviations * std::min(terms.deviation, 0.4));
  const Cents step = round_step(0.7 * 2 * half / static_cast<double>(count));
  const std::int64_t middle = std::llround(100 * terms.forward / static_cast<double>(step));
  const std::int64_t first = std::max<std::int64_t>(1, middle - count / 2);
  std::vector<Cents> strikes;
  for (std::int64_t i = 0; i < count; ++i) strikes.push_back((first + i) * step);
  return strikes;
}

}  // namespace duskgrid::make_night
