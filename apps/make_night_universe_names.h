// Who is listed in the invented universe: the kinds of names, how many expiries and strikes each
// has, and the smiles behind their prices. Not for prices: make_night_universe.h.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "make_night_quotes.h"

namespace duskgrid::make_night {

enum class Kind : std::uint8_t {
  index,  // European, many expiries and strikes
  large,  // the rest is American
  medium,
  small,
  payer,           // pays cash every quarter, for which calls are exercised early
  hard_to_borrow,  // carry of 8 to 40 % a year
  event,           // an event ahead that moves the price by a known size, up or down
  dead,            // offered, never bid for
};
std::string_view word(Kind kind);

// What happens at an event: the forward is multiplied by up with `chance`, else by down, which
// leaves its mean.
struct EventJump {
  Date date;
  double up, down, chance;
};

struct CashDividend {
  Date ex;
  Cents amount;
};

struct ListedSlice {
  Expiry expiry;
  std::int64_t strikes;  // how many
};

struct ListedName {
  Kind kind;
  Name name;
  SpreadRule spread;
  std::optional<EventJump> event;
  std::vector<CashDividend> dividends;  // by date
  std::vector<ListedSlice> slices;      // by date
};

// All names, with so many strikes that there are `pairs` of call and put in all: exactly, unless
// every slice is at its least number of strikes. Codes differ.
std::vector<ListedName> list_universe(const World& world, std::int64_t underlyings,
                                      std::int64_t pairs);

// The continuous yield that gives the forward to an expiry: the name's own carry, and its dividends
// to there, the spot falling by their present values.
double carry_to(const ListedName& listed, const AsOf& as_of, const RateCurve& rates,
                const Expiry& expiry);

// Total variance at a strike.
double total_variance(const ListedName& listed, const AsOf& as_of, const Expiry& expiry,
                      double log_moneyness);

// So many strikes at round steps about the forward, in cents, over about three deviations either
// way.
std::vector<Cents> listed_strikes(const Terms& terms, std::int64_t count);

}  // namespace duskgrid::make_night
