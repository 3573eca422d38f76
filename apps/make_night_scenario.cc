#include "make_night_scenario.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <iterator>

#include "make_night_toml.h"

namespace duskgrid::make_night {
namespace {

using Quotes = std::vector<MadeQuote>;

constexpr Ticks kIndexTicks{5, 10, 300};
constexpr Ticks kShareTicks{1, 5, 300};
constexpr std::int64_t kDay = 86'400;

std::vector<Expiry> monthlies(const AsOf& as_of, std::initializer_list<int> counts) {
  std::vector<Expiry> expiries;
  for (const int count : counts) expiries.push_back({third_friday(as_of, count)});
  return expiries;
}

void append(Quotes& all, const Quotes& more) { all.insert(all.end(), more.begin(), more.end()); }

void mark(MadeQuote& quote, const std::string& kind, const std::string& expected) {
  quote.fault = Fault{kind, expected};
}

// --- What is different on the next night ------------------------------------------

bool next_night(const World& world) { return world.as_of.date != world.listed.date; }

// One name whose level jumps, one whose skew steepens, and an index on an ordinary day.
Name moved(const World& world, Name name) {
  if (!next_night(world)) return name;
  if (name.code == "KELPWK") {
    name.smile.vol_short += 0.045;
    name.smile.vol_long += 0.045;
  }
  if (name.code == "LANTRN") name.smile.skew = -0.66;
  if (name.code == "QNOR") {
    name.spot += 1'705;
    name.smile.vol_short += 0.004;
  }
  return name;
}

std::string next_night_lines(const World& world) {
  const auto line = [](const char* name, const std::string& expiry, const char* kind,
                       const char* expected) {
    return fmt::format("{}\t{}\t{}\t{}\n", name, expiry, kind, expected);
  };
  return "underlying\texpiry\tkind\texpected\n" + line("KELPWK", "", "level", "compared") +
         line("LANTRN", "", "skew", "compared") +
         line("BRAKSH", iso_date(third_friday(world.listed, 6)), "expiry-gone", "vanished-expiry") +
         line("SALTPN", "", "file-of-the-night-before", "stale") +
         line("TRWLR", "", "underlying-gone", "carried");
}

// --- The names -----------------------------------------------------------------

Quotes index_chain(const World& world) {
  const AsOf& as_of = world.listed;
  ChainPlan plan;
  plan.name = moved(world, {"QNOR", 284'635, 0.014, {0.145, 0.195, 1.8, -0.68, 1.05}});
  plan.expiries = {{days_ahead(as_of, 3)}, {third_friday(as_of, 0)}, {days_ahead(as_of, 14)}};
  for (const int count : {0, 1, 2, 3, 6, 9, 12, 24}) {
    plan.expiries.push_back({third_friday(as_of, count), Settled::morning});
  }
  plan.strikes = {{500, 1000, 2500, 5000, 10'000}, 6.5, 4.5, 140};
  plan.spread = {0.06, 0.004, 0.18, kIndexTicks};
  return make_chain(world, plan);
}

ChainPlan share(const World& world, Name name) {
  ChainPlan plan;
  plan.name = moved(world, std::move(name));
  plan.expiries = monthlies(world.listed, {0, 1, 3, 6});
  plan.strikes = {{50, 100, 250, 500, 1000, 2500, 5000}, 2.8, 2.8, 44};
  plan.spread = {0.01, 0.006, 0.12, kShareTicks};
  return plan;
}

ChainPlan kelp(const World& world) {
  return share(world, {"KELPWK", 4'820, 0.022, {0.27, 0.29, 1.2, -0.45, 0.95}});
}
ChainPlan lantern(const World& world) {
  return share(world, {"LANTRN", 13'215, 0.008, {0.36, 0.33, 1.0, -0.38, 0.9}});
}
ChainPlan brackish(const World& world) {
  ChainPlan plan = share(world, {"BRAKSH", 126'240, 0.017, {0.23, 0.25, 1.5, -0.5, 1.0}});
  if (next_night(world)) plan.expiries.pop_back();
  return plan;
}
ChainPlan marsh(const World& world) {
  return share(world, {"MARSHG", 7'655, 0.0, {0.41, 0.37, 0.8, -0.3, 0.85}});
}

// Nobody bids for any of its contracts.
Quotes foghorn(const World& world) {
  ChainPlan plan = share(world, {"FOGHRN", 915, 0.0, {0.6, 0.55, 1.0, -0.2, 0.6}});
  plan.expiries = monthlies(world.listed, {1, 3});
  plan.strikes.most = 12;
  Quotes quotes = make_chain(world, plan);
  for (MadeQuote& quote : quotes) {
    quote.bid = 0;
    quote.bid_size = 0;
    mark(quote, "dead-name", "no-bid");
  }
  return quotes;
}

Name tidelock() { return {"TIDLCK", 2'140, 0.011, {0.44, 0.42, 1.0, -0.35, 0.8}}; }

// One, two, three and four sound quotes in its slices, all out of the money, so that
// no call and put share a strike.
Quotes tidelock_quotes(const World& world) {
  ChainPlan plan = share(world, tidelock());
  const Quotes full = make_chain(world, plan);
  std::vector<std::size_t> kept;
  for (std::size_t slice = 0; slice < plan.expiries.size(); ++slice) {
    const Date date = plan.expiries[slice].date;
    const auto calls = out_of_the_money(full, plan.name.code, date, Side::call);
    const auto puts = out_of_the_money(full, plan.name.code, date, Side::put);
    // Turn about: call, put, call, put.
    for (std::size_t i = 0; i <= slice; ++i) {
      const auto& side = i % 2 == 0 ? calls : puts;
      if (i / 2 < side.size()) kept.push_back(side[i / 2]);
    }
  }
  std::sort(kept.begin(), kept.end());
  Quotes quotes;
  for (const std::size_t i : kept) quotes.push_back(full[i]);
  return quotes;
}

ChainPlan halyard(const World& world) {
  ChainPlan plan = share(world, {"HALYRD", 6'440, 0.019, {0.31, 0.3, 1.0, -0.4, 0.9}});
  plan.expiries = monthlies(world.listed, {3});
  plan.strikes = {{100, 250}, 4.2, 4.2, 90};
  return plan;
}
ChainPlan trawler(const World& world) {
  ChainPlan plan = share(world, {"TRWLR", 3'705, 0.0, {0.24, 0.24, 1.0, 0.0, 0.0}});
  plan.strikes.most = 44;
  return plan;
}
ChainPlan drydock(const World& world) {
  ChainPlan plan = share(world, {"DRYDOK", 9'180, 0.026, {0.29, 0.3, 1.0, -0.42, 0.95}});
  plan.strikes.most = 44;
  return plan;
}
ChainPlan eelrun(const World& world) {
  ChainPlan plan = share(world, {"EELRUN", 15'850, 0.012, {0.34, 0.28, 1.4, -0.25, 0.9}});
  plan.expiries = monthlies(world.listed, {0, 1, 2, 3, 6, 12});
  plan.strikes = {{250, 500, 1000, 2500}, 2.5, 2.5, 17};
  return plan;
}
ChainPlan saltpan(const World& world) {
  ChainPlan plan = share(world, {"SALTPN", 8'550, 0.051, {0.33, 0.26, 1.6, 0.2, 0.9}, true});
  plan.expiries = monthlies(world.listed, {1, 3, 6, 9});
  plan.strikes = {{50, 100, 250, 500}, 2.6, 2.6, 40};
  return plan;
}

// --- What is wrong with them ---------------------------------------------------

// Up to `count` quotes out of the money of one slice, every second one from near to
// far, so that each fault keeps sound neighbours. Fewer when the slice is shorter, as
// another as-of can make it. Valid until quotes are added.
std::vector<MadeQuote*> targets(Quotes& quotes, const std::string& name, const Date& expiry,
                                Side side, std::size_t count) {
  const auto near_to_far = out_of_the_money(quotes, name, expiry, side);
  std::vector<MadeQuote*> found;
  for (std::size_t i = 1; i < near_to_far.size() && found.size() < count; i += 2) {
    found.push_back(&quotes[near_to_far[i]]);
  }
  return found;
}

void plant_in_kelp(Quotes& quotes, const World& world) {
  const Date near = third_friday(world.listed, 1);
  const Date far = third_friday(world.listed, 6);
  for (MadeQuote* quote : targets(quotes, "KELPWK", near, Side::call, 3)) {
    std::swap(quote->bid, quote->ask);
    mark(*quote, "crossed", "crossed");
  }
  for (MadeQuote* quote : targets(quotes, "KELPWK", far, Side::put, 2)) {
    quote->bid.reset();
    mark(*quote, "bid-missing", "no-bid");
  }
  for (MadeQuote* quote : targets(quotes, "KELPWK", far, Side::call, 2)) {
    quote->ask.reset();
    mark(*quote, "ask-missing", "no-ask");
  }
}

void plant_damage(Quotes& quotes, const Date& expiry) {
  constexpr std::pair<Damage, const char*> kDamages[] = {
      {Damage::cut_short, "row-cut-short"},
      {Damage::no_strike, "strike-missing"},
      {Damage::words_for_strike, "strike-in-words"},
      {Damage::impossible_date, "date-impossible"}};
  for (const Side side : {Side::call, Side::put}) {
    const auto rows = targets(quotes, "LANTRN", expiry, side, std::size(kDamages));
    for (std::size_t i = 0; i < rows.size(); ++i) {
      rows[i]->damage = kDamages[i].first;
      mark(*rows[i], kDamages[i].second, "unreadable");
    }
  }
}

void plant_in_lantern(Quotes& quotes, const World& world) {
  for (MadeQuote* quote : targets(quotes, "LANTRN", third_friday(world.listed, 1), Side::put, 3)) {
    quote->quoted -= 3 * kDay;
    mark(*quote, "stale", "stale");
  }
  for (MadeQuote* quote : targets(quotes, "LANTRN", third_friday(world.listed, 3), Side::call, 3)) {
    // A spread of 1.64 times the mid.
    quote->ask = *quote->bid * 10;
    mark(*quote, "wide", "wide");
  }
  plant_damage(quotes, third_friday(world.listed, 6));
}

// Moves the call and the put of one strike together, so that parity holds and only
// the comparison between strikes breaks.
void lift_strike(Quotes& quotes, const MadeQuote& like, Cents by, const std::string& kind) {
  const Date date = like.expiry.date;
  const Cents strike = like.strike;
  const std::string name = like.underlying;
  for (MadeQuote& quote : quotes) {
    if (quote.underlying != name || quote.expiry.date != date || quote.strike != strike) continue;
    quote.bid = *quote.bid + by;
    quote.ask = *quote.ask + by;
    mark(quote, kind, "violation");
  }
}

void plant_in_marsh(Quotes& quotes, const World& world) {
  // Two middle calls sell for 30 cents more than both wings cost.
  const auto fly = out_of_the_money(quotes, "MARSHG", third_friday(world.listed, 3), Side::call);
  if (fly.size() > 4) {
    const MadeQuote& body = quotes[fly[3]];
    const Cents wings = *quotes[fly[2]].ask + *quotes[fly[4]].ask;
    lift_strike(quotes, body, (wings + 30 - 2 * *body.bid + 1) / 2, "butterfly-break");
  }
  // The higher strike sells for 10 cents more than the lower one costs.
  const auto step = out_of_the_money(quotes, "MARSHG", third_friday(world.listed, 1), Side::call);
  if (step.size() > 4) {
    const MadeQuote& higher = quotes[step[3]];
    lift_strike(quotes, higher, *quotes[step[2]].ask + 10 - *higher.bid, "vertical-break");
  }
}

// Contracts adjusted for a past distribution: another multiplier, strikes off the ladder.
void plant_adjusted(Quotes& quotes, const World& world) {
  const auto calls = out_of_the_money(quotes, "BRAKSH", third_friday(world.listed, 3), Side::call);
  Quotes more;
  for (std::size_t i = 0; i < calls.size() && i < 2; ++i) {
    for (const std::size_t offset : {0U, 1U}) {  // the call and the put after it
      more.push_back(quotes[calls[i] + offset]);
      more.back().strike -= 937;
      more.back().multiplier = 137;
      mark(more.back(), "adjusted", "non-standard");
    }
  }
  append(quotes, more);
}

// Rows of an expiry that has passed, still listed.
void plant_expired(Quotes& quotes, const World& world) {
  const Date past = third_friday(world.listed, -1);
  for (const Cents strike : {4'500, 4'750, 5'000}) {
    for (const Side side : {Side::call, Side::put}) {
      MadeQuote quote;
      quote.underlying = "KELPWK";
      quote.expiry = {past};
      quote.strike = strike;
      quote.side = side;
      quote.spot = 4'820;
      quote.bid = std::max<Cents>(0, side == Side::call ? 4'820 - strike : strike - 4'820);
      quote.ask = *quote.bid + 10;
      quote.quoted = unix_seconds(world.as_of) - 60;
      mark(quote, "expired", "expired");
      quotes.push_back(quote);
    }
  }
}

// The same rows again, and rows requoted since: the later line, then the older quote,
// is the one to leave out.
void plant_repeats(Quotes& quotes, const World& world) {
  const Date expiry = third_friday(world.listed, 1);
  Quotes more;
  for (const MadeQuote* quote : targets(quotes, "BRAKSH", expiry, Side::put, 4)) {
    more.push_back(*quote);
    mark(more.back(), "repeated", "duplicate");
  }
  for (const MadeQuote* quote : targets(quotes, "BRAKSH", expiry, Side::call, 2)) {
    more.push_back(*quote);
    more.back().quoted -= 7200;
    more.back().bid = *quote->bid + 20;
    more.back().ask = *quote->ask + 20;
    mark(more.back(), "requoted", "duplicate");
  }
  append(quotes, more);
}

Quotes shares(const World& world) {
  Quotes quotes = make_chain(world, kelp(world));
  append(quotes, make_chain(world, lantern(world)));
  append(quotes, foghorn(world));
  append(quotes, make_chain(world, brackish(world)));
  append(quotes, tidelock_quotes(world));
  append(quotes, make_chain(world, marsh(world)));
  plant_in_kelp(quotes, world);
  plant_in_lantern(quotes, world);
  plant_in_marsh(quotes, world);
  plant_adjusted(quotes, world);
  plant_expired(quotes, world);
  plant_repeats(quotes, world);
  return quotes;
}

Quotes ladder(const World& world) {
  const ChainPlan plan = halyard(world);
  Quotes quotes = make_chain(world, plan);
  for (const Side side : {Side::call, Side::put}) {
    for (MadeQuote* quote : targets(quotes, plan.name.code, plan.expiries.front().date, side, 3)) {
      quote->bid.reset();
      quote->ask.reset();
      mark(*quote, "not-quoted", "no-bid");
    }
  }
  return quotes;
}

// Quotes made at a volatility 15 points too high, with the usual spread.
void plant_outliers(Quotes& quotes, const World& world, const ChainPlan& plan) {
  Stream random(world.seed, "outliers");
  for (const Expiry& expiry : plan.expiries) {
    const Terms terms = terms_of(world.as_of, world.rates, plan.name, expiry);
    const auto puts = targets(quotes, plan.name.code, expiry.date, Side::put, 2);
    if (puts.size() < 2) continue;
    MadeQuote& quote = *puts.back();
    const double strike = static_cast<double>(quote.strike) / 100;
    const double k = std::log(strike / terms.forward);
    const double vol = std::sqrt(total_variance(plan.name.smile, terms.t, k) / terms.t) + 0.15;
    quote_price(quote, black(Side::put, terms, strike, vol * vol * terms.t), k / terms.deviation,
                plan.spread, random);
    mark(quote, "outlier", "outlier");
  }
}

Quotes symbols(const World& world) {
  const ChainPlan flat = trawler(world);
  const ChainPlan dock = drydock(world);
  Quotes quotes;
  if (!next_night(world)) append(quotes, make_chain(world, flat));
  append(quotes, make_chain(world, dock));
  for (MadeQuote* quote :
       targets(quotes, flat.name.code, third_friday(world.listed, 3), Side::call, 2)) {
    quote->quoted -= 2 * kDay;
    mark(*quote, "stale", "stale");
  }
  plant_outliers(quotes, world, dock);
  return quotes;
}

// A settlement is the fair price to the cent; the spread is for the reader to assume.
Quotes settlements(const World& world) {
  const ChainPlan plan = saltpan(world);
  Quotes quotes = make_chain(world, plan);
  for (MadeQuote& quote : quotes) {
    const Terms terms = terms_of(world.as_of, world.rates, plan.name, quote.expiry);
    const double strike = static_cast<double>(quote.strike) / 100;
    const double w = total_variance(plan.name.smile, terms.t, std::log(strike / terms.forward));
    quote.bid = static_cast<Cents>(std::round(100 * black(quote.side, terms, strike, w)));
    quote.ask = quote.bid;
  }
  return quotes;
}

}  // namespace

std::vector<NightFile> demo_night(const World& world) {
  const Quotes index_quotes = index_chain(world);
  const Quotes share_quotes = shares(world);
  const Quotes ladder_quotes = ladder(world);
  const Quotes symbol_quotes = symbols(world);
  const Quotes vol_quotes = make_chain(world, eelrun(world), QuotedIn::vol);
  // The next night's settlements have not come: there is the file of the night before.
  World settled = world;
  settled.as_of = world.listed;
  const Quotes settlement_quotes = settlements(settled);

  std::vector<NightFile> files{{"index_chain.csv.gz", index_text(index_quotes), Packing::gzip},
                               {"shares_a.csv", shares_text(share_quotes, world.as_of)},
                               {"ladder.csv", ladder_text(ladder_quotes)},
                               {"osi_symbols.csv.zst", symbols_text(symbol_quotes), Packing::zstd},
                               {"vols.csv", vols_text(vol_quotes)},
                               {"settlements.csv", settlements_text(settlement_quotes)}};
  files.push_back({"night.toml", night_toml(world, {halyard(world), eelrun(world), saltpan(world),
                                                    share(world, tidelock())})});
  files.push_back(
      {"planted.tsv", "file\tline\tput_call\tunderlying\texpiry\tstrike\tkind\texpected\n" +
                          planted_lines("shares_a.csv", share_quotes, 1) +
                          planted_lines("ladder.csv", ladder_quotes, 2) +
                          planted_lines("osi_symbols.csv.zst", symbol_quotes, 1)});
  if (next_night(world)) files.push_back({"changes.tsv", next_night_lines(world)});
  return files;
}

}  // namespace duskgrid::make_night
