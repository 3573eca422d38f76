#include "sample_report.h"

#include <fmt/format.h>

#include <algorithm>
#include <chrono>
#include <cmath>
#include <random>

#include "market/day_count.h"
#include "pricing/black.h"

namespace duskgrid {
namespace {

using quotes::Reason;
using std::chrono::hours;

constexpr double kForward = 100;

quotes::AsOf sample_as_of() { return *quotes::parse_as_of("2031-03-14T16:00:00-05:00", ""); }

// Prices whose volatilities are `half` either side of the smile, in vol.
void price(quotes::Quote& q, const surface::Slice& slice, double vol, double half) {
  const pricing::BlackTerms terms{q.put_call, slice.forward, q.strike, slice.discount_factor};
  const double root = std::sqrt(slice.year_fraction);
  q.vol_bid = vol - half;
  q.vol_mid = vol;
  q.vol_ask = vol + half;
  q.bid = pricing::black_price(terms, q.vol_bid * root);
  q.ask = pricing::black_price(terms, q.vol_ask * root);
}

}  // namespace

SampleReport::SampleReport(const std::string& name, int expiries, int strikes)
    : as_of(sample_as_of()) {
  table.underlyings = {name};
  table.files = {"night/quotes.csv"};
  table.notes = {"strike cell is not a number"};
  surface = {name, kForward, {}};
  record = {name, publish::Status::flagged, true, expiries, 0, 0, 1, "", "1 arbitrage"};
  add_slices(expiries);
  for (const auto& slice : surface.slices) add_quotes(slice, strikes);
  plant();
  add_changes();
  subject.record = &record;
  subject.surface = &surface;
  subject.violations = violations;
  subject.facts = {{"Spot", "100", "given"}, {"Dividends", "2031-05-02 0.80 <cash>", "given"}};
}

void SampleReport::add_slices(int expiries) {
  for (int i = 0; i < expiries; ++i) {
    const auto expiry = as_of.instant + hours{24 * (7 + 21 * i)};
    const double t = market::year_fraction(as_of.instant, expiry);
    const double theta = 0.045 * t, psi = 0.9 * std::sqrt(theta);
    const double reach = 2.5 * std::sqrt(theta);
    surface.slices.push_back({expiry,
                              t,
                              kForward * std::exp(0.01 * t),
                              std::exp(-0.03 * t),
                              {theta, -0.45, psi},
                              -reach,
                              reach});
  }
}

void SampleReport::add_quotes(const surface::Slice& slice, int strikes) {
  for (int j = 0; j < strikes; ++j) {
    const double k = slice.k_low + (slice.k_high - slice.k_low) * (j + 0.5) / strikes;
    const double strike = std::round(100 * slice.forward * std::exp(k)) / 100;
    const double at = std::log(strike / slice.forward);
    const double vol = std::sqrt(surface::smile_of(slice, at).w / slice.year_fraction);
    for (const auto side : {quotes::PutCall::call, quotes::PutCall::put}) {
      quotes::Quote q;
      q.file = 0;
      q.line = static_cast<std::int64_t>(table.quotes.size()) + 2;
      q.underlying = 0;
      q.put_call = side;
      q.expiry = slice.expiry;
      q.strike = strike;
      price(q, slice, vol * (1 + 0.004 * std::sin(j)), 0.004 + 0.02 * at * at);
      q.vol_fit = vol;
      const bool money = (side == quotes::PutCall::call) != (at >= 0);
      q.reason = money ? Reason::in_the_money : Reason::none;
      q.miss = money ? quotes::kAbsent : 0;
      table.quotes.push_back(q);
    }
  }
}

void SampleReport::plant() {
  const std::size_t slices = surface.slices.size(), each = table.quotes.size() / slices;
  const auto middle = slices / 2;
  // A put far above its neighbours.
  auto& outlier = table.quotes[middle * each + 2 * (each / 8) + 1];
  price(outlier, surface.slices[middle], outlier.vol_mid + 0.08, 0.004);
  outlier.reason = Reason::outlier;
  outlier.miss = quotes::kAbsent;
  outlier_strike = outlier.strike;
  auto& unreadable = table.quotes.emplace_back();
  unreadable.file = 0;
  unreadable.line = 99'999;
  unreadable.underlying = 0;
  unreadable.reason = Reason::unreadable;
  unreadable.note = 0;

  std::size_t row = 0;
  for (const auto& slice : surface.slices) {
    publish::ReportExpiry e{slice.expiry, slice.year_fraction, {}, {}, {}, {}, {}, {}};
    e.forward = market::ForwardEstimate{slice.forward,
                                        slice.discount_factor,
                                        0.03,
                                        0.02,
                                        9,
                                        slice.expiry == outlier.expiry ? 1 : 0,
                                        market::ForwardSource::parity,
                                        slice.forward - 0.05,
                                        slice.forward + 0.05};
    e.financing = publish::FinancingRow{
        slice.expiry, publish::ExerciseTaken::european, kForward, publish::Origin::given,
        0.03,         publish::Origin::given,           1,        -0.8,
        0.012,        publish::Origin::inferred};
    for (std::size_t i = 0; i < each; ++i, ++row) e.quotes.push_back(&table.quotes[row]);
    for (std::size_t i = 0; i + 1 < each; i += 2) {
      const auto &call = *e.quotes[i], &put = *e.quotes[i + 1];
      e.pairs.push_back({call.strike, call.strike + (call.bid - put.ask) / slice.discount_factor,
                         call.strike + (call.ask - put.bid) / slice.discount_factor});
    }
    for (int i = 0; i <= 20; ++i) {
      const double k = slice.k_low + (slice.k_high - slice.k_low) * i / 20;
      const double vol = std::sqrt(surface::smile_of(slice, k).w / slice.year_fraction);
      e.band.push_back({k, vol - 0.006 - 0.03 * k * k, vol + 0.006 + 0.03 * k * k});
    }
    subject.expiries.push_back(std::move(e));
  }
  subject.unplaced.push_back(&table.quotes.back());

  auto& carried = subject.expiries[slices - 1];
  carried.carried_from = as_of.instant - hours{24 * 3};
  carried.forward->source = market::ForwardSource::carried;
  carried.quotes.clear();
  carried.pairs.clear();
  carried_expiry = carried.expiry;
  changed_expiry = subject.expiries[1].expiry;
  broken_expiry = outlier.expiry;
  const auto& lower = table.quotes[static_cast<std::size_t>(&outlier - table.quotes.data()) - 2];
  violations.push_back(
      {arbitrage::Scope::quotes,
       arbitrage::Kind::vertical,
       outlier.expiry,
       quotes::kNoInstant,
       {lower.strike, outlier.strike},
       0.42,
       6.1,
       3.3,
       {{1, arbitrage::LegType::put, lower.strike, outlier.expiry, lower.ask, 0.01, 0.1},
        {-1, arbitrage::LegType::put, outlier.strike, outlier.expiry, outlier.bid, 0.01, 0.1}}});
  for (const auto& q : table.quotes)
    if (q.reason == Reason::none) {
      ++record.used;
      ++record.inside;
    }
}

void SampleReport::add_changes() {
  subject.previous = as_of.instant - hours{24};
  for (const auto& slice : surface.slices)
    for (const double moneyness : {0.8, 0.9, 0.95, 1.0, 1.05, 1.1, 1.2}) {
      const double k = std::log(moneyness);
      const double vol = std::sqrt(surface::smile_of(slice, k).w / slice.year_fraction);
      const bool large = slice.expiry == changed_expiry && moneyness == 0.9;
      const double level = 0.002, skew = -0.004 * k, rest = large ? 0.021 : 0.0001;
      subject.changes.push_back({slice.expiry, "", k, slice.forward * moneyness,
                                 vol - level - skew - rest, vol, level, skew, 0, 0, 0, rest,
                                 level + skew + rest, true, quotes::kAbsent,
                                 large ? publish::SignOff::tolerance : publish::SignOff::none});
    }
}

SampleNight::SampleNight(int underlyings) {
  const std::vector<std::string> hostile{
      "<script>alert(1)</script>", "=1+1",  "</script><b>x", "A&B \"Q\"", "index",
      "\xE2\x80\xA8LINE",          "../up", "{{data}}"};
  std::mt19937 random(7);
  run.version = "0.0.0";
  run.as_of = sample_as_of();
  run.inputs = {{"night/quotes.csv", std::string(64, 'a'), 123'456, 1'500'000}};
  for (int i = 0; i < underlyings; ++i) {
    const bool odd = i < static_cast<int>(hostile.size());
    publish::UnderlyingRecord u;
    u.name = odd ? hostile[static_cast<std::size_t>(i)] : fmt::format("UND{:05}", i);
    const auto roll = random() % 100;
    u.status = roll < 3    ? publish::Status::refused
               : roll < 5  ? publish::Status::carried
               : roll < 17 ? publish::Status::flagged
                           : publish::Status::published;
    u.certified = u.status != publish::Status::refused;
    u.slices = u.certified ? 4 + static_cast<std::int64_t>(random() % 8) : 0;
    u.used = 25 * u.slices;
    u.inside = u.used - static_cast<std::int64_t>(roll % 7 == 0 ? random() % 9 : 0);
    if (u.status == publish::Status::flagged) {
      u.violations = 1 + static_cast<std::int64_t>(random() % 12);
      u.message = fmt::format("{} arbitrages among the quotes", u.violations);
    }
    if (u.status == publish::Status::refused) u.message = "no usable quote: no-bid 34";
    if (u.status == publish::Status::carried) u.carried_from = "2031-03-13T16:00:00-05:00";
    if (odd) u.message += " of " + u.name;
    run.underlyings.push_back(u);
  }
  for (const auto& u : run.underlyings) {
    publish::ReportLine line{&u, {}};
    for (int i = 0; i < u.used; ++i) line.rows.add(Reason::none);
    for (int i = 0; i < 30; ++i) line.rows.add(i < 25 ? Reason::in_the_money : Reason::no_bid);
    if (u.violations > 0) line.rows.add(Reason::outlier);
    line.worst_miss = u.used > u.inside ? 1.7 : 0;
    line.has_page = u.status != publish::Status::published;
    run.rows.add(line.rows);
    lines.push_back(line);
  }
  std::sort(lines.begin(), lines.end(), publish::more_concern);
}

}  // namespace duskgrid
