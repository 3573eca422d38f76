// From fair prices to quotes: strikes, spreads, ticks, sizes, and the faults that can
// be planted in them. Not for how a file writes them: make_night_files.h.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "make_night_market.h"

namespace duskgrid::make_night {

// What is wrong with a planted row, and the word a reader of the night should end at:
// a reason of the ledger, or "violation" for a break between otherwise sound quotes.
struct Fault {
  std::string kind;
  std::string expected;
};

// Damage done when the row is written, for rows that no reader can read.
enum class Damage : std::uint8_t { none, cut_short, no_strike, words_for_strike, impossible_date };

struct MadeQuote {
  std::string underlying;
  Expiry expiry;
  Cents strike = 0;
  Side side = Side::call;
  std::optional<Cents> bid;  // absent is an empty cell; 0 is written as 0.00
  std::optional<Cents> ask;
  std::int64_t bid_size = 0;
  std::int64_t ask_size = 0;
  std::int64_t volume = 0;
  std::int64_t open_interest = 0;
  std::int64_t quoted = 0;  // Unix seconds
  Cents spot = 0;
  int multiplier = 100;
  double forward = 0;  // the truth, never written
  std::optional<Fault> fault;
  Damage damage = Damage::none;
};

struct Ticks {
  Cents below = 1;  // under the change
  Cents above = 5;  // from the change on
  Cents change = 300;
};

// Half-spread in quote currency = (base + of_price * price) (1 + of_distance * |d|), d
// in deviations from the money, times a random 0.8 to 1.2.
struct SpreadRule {
  double base = 0.03;
  double of_price = 0.01;
  double of_distance = 0.15;
  Ticks ticks;
};

// Strikes at whole multiples of the first step that gives at most `most` of them
// between `down` deviations below the forward and `up` above it.
struct StrikeRule {
  std::vector<Cents> steps;
  double down = 3;
  double up = 3;
  std::size_t most = 25;
};

struct ChainPlan {
  Name name;
  std::vector<Expiry> expiries;
  StrikeRule strikes;
  SpreadRule spread;
};

struct World {
  std::uint64_t seed = 1;
  AsOf as_of;
  AsOf listed;  // when the contracts were listed: the as-of, or on the next night that before it
  RateCurve rates;
};

// A price quoted around `price`, which stays between bid and ask.
void quote_price(MadeQuote& quote, double price, double distance, const SpreadRule& rule,
                 Stream& random);
// The same for a volatility; bid and ask then hold hundredths of a percent.
void quote_vol(MadeQuote& quote, double vol, double distance, Stream& random);

enum class QuotedIn : std::uint8_t { price, vol };
// Every contract of the plan that has not expired, by expiry, strike, call before put. In
// volatility only the side out of the money is quoted.
std::vector<MadeQuote> make_chain(const World& world, const ChainPlan& plan,
                                  QuotedIn unit = QuotedIn::price);

// Positions of the faultless, bid-for quotes out of the money, nearest the money first.
std::vector<std::size_t> out_of_the_money(const std::vector<MadeQuote>& quotes,
                                          const std::string& underlying, const Date& expiry,
                                          Side side);

}  // namespace duskgrid::make_night
