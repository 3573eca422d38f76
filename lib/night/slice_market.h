// What carries one underlying from tonight to its expiries: spot, dividends, borrow, forwards; what
// of it was given and what its quotes say.
#pragma once

#include <optional>
#include <vector>

#include "market/parity.h"
#include "night/config.h"
#include "pricing/american_slice.h"
#include "publish/tables.h"
#include "quotes/chain.h"

namespace duskgrid::night {

// An expiry that lies ahead.
struct OpenSlice {
  const quotes::ChainSlice* rows;
  double year_fraction;
  bool american = false;  // some quote of it is
  std::optional<market::ForwardEstimate> forward = {};
  // What early exercise depends on; absent where the slice is European, or where the spot or the
  // borrow is not to be had and American quotes are taken as European.
  std::optional<pricing::ExerciseTerms> exercise = {};
  bool settled = true;  // the forward agrees with its own early-exercise premiums
  publish::FinancingRow financing = {};
};

struct ChainMarket {
  std::optional<double> spot;
  publish::Origin spot_origin = publish::Origin::none;
  std::vector<OpenSlice> slices;
};

// Of the slices of a cleaned chain that have not expired. An american expiry has the forward that
// its borrow gives, where it is stated; else the one at which call-put parity holds for the
// European equivalents.
ChainMarket find_market(const quotes::QuoteTable& table, const quotes::Chain& chain,
                        const NightConfig& config, const ResolvedNight& night);

// A forward stated for the very instant of an expiry, or else for its local date.
std::optional<double> given_forward(const UnderlyingFacts& facts, const ResolvedNight& night,
                                    quotes::Instant expiry);

}  // namespace duskgrid::night
