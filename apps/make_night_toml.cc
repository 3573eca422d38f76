#include "make_night_toml.h"

#include <fmt/format.h>

#include <cmath>
#include <utility>

namespace duskgrid::make_night {
namespace {

// Everything that no calendar and no seed changes.
constexpr const char* kSources = R"(
# Written under the ordinary words, so nothing needs saying. Compression is known by
# content; the settlement column tells am from pm on the same date.
[[source]]
files = ["index_chain.csv.gz"]

# A file with words of its own: map each field to its header. Delimiter, byte-order
# mark, line ends and "1,250.00" in a quoted cell are found without help.
[[source]]
files = ["shares_a.csv"]
[source.columns]
underlying = "Share"
expiry = "Expires"
put_call = "Which"
bid_size = "BidLots"
ask_size = "AskLots"
volume = "Traded"
open_interest = "Held"
quote_time = "Quoted"
underlying_price = "Spot"
exercise = "Style"
multiplier = "Lot"

# Call and put side by side: the fields of a side carry call_ or put_. This house
# writes n.q. for "not quoted".
[[source]]
files = ["ladder.csv"]
layout = "call-put-per-row"
null_words = ["n.q."]
exercise = "european"
[source.columns]
call_bid = "bid.call"
call_ask = "ask.call"
call_volume = "lots.call"
put_bid = "bid.put"
put_ask = "ask.put"
put_volume = "lots.put"
# The file says neither whose options these are nor when they expire.
[source.fixed]
underlying = "{ladder}"
expiry = "{ladder_expiry}"

# A 21-character symbol stands for underlying, expiry, side and strike; quote times
# are Unix seconds. A glob takes the file packed or not.
[[source]]
files = ["osi_symbols.csv*"]
[source.columns]
osi_symbol = "contract"
quote_time = "stamp"

# A market that quotes volatility, in percent, with decimal commas and worded dates.
[[source]]
files = ["vols.csv"]
delimiter = ";"
decimal = ","
thousands = "."
date_format = "%d %b %Y"
vol_scale = 0.01
[source.columns]
underlying = "Name"
expiry = "Runs to"
put_call = "Right"
bid_vol = "Vol bid"
ask_vol = "Vol ask"

# One settlement price a contract: state the half-spread to assume (quote currency).
# Strikes are in hundredths.
[[source]]
files = ["settlements.csv"]
strike_scale = 0.01
half_spread = 0.03
[source.columns]
underlying = "product"
price = "settle"
)";

constexpr const char* kGrid = R"(
[grid]
axis = "moneyness"
points = [0.6, 0.8, 0.9, 1.0, 1.1, 1.2, 1.4]
tenors = ["1M", "3M", "6M", "1Y"]
)";

void replace(std::string& text, const std::string& mark, const std::string& with) {
  const std::size_t place = text.find(mark);
  if (place != std::string::npos) text.replace(place, mark.size(), with);
}

std::string rates(const World& world) {
  std::string text = "\n# Continuous zero rates by tenor (a date will do too).\n[rates]\n";
  constexpr std::pair<const char*, int> kTenors[] = {{"1M", 1},  {"3M", 3},  {"6M", 6},
                                                     {"1Y", 12}, {"2Y", 24}, {"3Y", 36}};
  for (const auto& [tenor, months] : kTenors) {
    const double t = year_fraction(world.as_of, {months_ahead(world.as_of, months)});
    text += fmt::format("\"{}\" = {:.5f}\n", tenor, world.rates.zero_rate(t));
  }
  return text;
}

std::string spot_and_carry(const ChainPlan& plan, const std::string& why) {
  return fmt::format("\n# {}\n[underlying.{}]\nspot = {}\ncarry = {:.3f}\n", why, plan.name.code,
                     decimals(plan.name.spot), plan.name.carry);
}

std::string forwards(const World& world, const ChainPlan& plan) {
  std::string list;
  for (const Expiry& expiry : plan.expiries) {
    const double forward = terms_of(world.as_of, world.rates, plan.name, expiry).forward;
    list += fmt::format("{}\"{}\" = {}", list.empty() ? "" : ", ", iso_date(expiry.date),
                        decimals(static_cast<Cents>(std::round(100 * forward))));
  }
  return fmt::format(
      "\n# Options on a future: the forward of an expiry is the price of its future.\n"
      "[underlying.{}]\nforwards = {{ {} }}\n",
      plan.name.code, list);
}

}  // namespace

std::string night_toml(const World& world, const StatedNames& names) {
  std::string sources = kSources;
  replace(sources, "{ladder}", names.ladder.name.code);
  replace(sources, "{ladder_expiry}", iso_date(names.ladder.expiries.front().date));
  return fmt::format(
             "# A night of the invented harbour exchange. Each source below describes one\n"
             "# habit of file; what a file shows by itself is left unsaid.\n"
             "as_of = \"{}\"\n"
             "# Local times that the words of a settlement column stand for.\n"
             "settlement_times = {{ am = \"09:30\", pm = \"16:00\" }}\n",
             world.as_of.text) +
         sources + rates(world) +
         spot_and_carry(names.vols, "Volatilities show no forward: it comes from spot and carry.") +
         spot_and_carry(names.thin, "No call and put share a strike here, so parity is silent.") +
         forwards(world, names.futures) + kGrid;
}

}  // namespace duskgrid::make_night
