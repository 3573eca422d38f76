// Chains that are hard to fit, invented from a seed: the same seed, the same chain. Each is quoted
// around a truth known to be free of arbitrage, save for the quotes it names as offenders.
#pragma once

#include <array>
#include <cstddef>
#include <cstdint>
#include <functional>
#include <string>
#include <string_view>
#include <vector>

#include "surface/backbone.h"

namespace duskgrid::oracle {

// What makes a chain hard, and what a fit should do with it. "All inside" means that a surface
// free of arbitrage passes through every spread, so that a miss is the fit's own.
enum class ChainKind : std::uint8_t {
  event,             // lognormal before an announcement and a mixture of jumps after it: smiles
                     // shaped like a W, two humps of density, a leap in variance. All inside
  same_day,          // the first expiry is 1 to 8 hours off, steep, in ticks. All inside
  next_day,          // two expiries a day apart. All inside
  crossed_mids,      // total variances of two expiries cross in the mids, never given the spreads:
                     // all inside, the fit leaving the mids
  few_quotes,        // slices of one, two or three quotes among others. All inside; what the quotes
                     // do not tell comes from the neighbours
  many_strikes,      // 2,000 strikes in a slice. All inside
  tick_spreads,      // one tick wide (0.01 on a forward of 100): from nothing at the money to wide
                     // in the wings, and never centred. All inside
  full_spreads,      // half-spreads of 100 % of the volatility, mids far off. All inside
  zigzag,            // mids that go up and down inside wide spreads, full of butterflies. All
                     // inside, and smooth
  broken_butterfly,  // a bid above the line between its neighbours' asks: no surface meets all
                     // three. The rest inside, the misfit on or beside the broken strike
  crossed_calendar,  // over a stretch of strikes a later ask worth less variance than an earlier
                     // bid. The rest inside, the misfit within the stretch
  stray,             // one or two quotes 20 half-spreads off in a clean chain. All others inside
  kinked,            // volatility piecewise linear in strike: an atom of density at each kink. All
                     // inside but for a few beside the kinks, which a smooth curve rounds
  flat,              // one volatility everywhere, spreads down to a thousandth of it. All inside
  steep,             // skews within 3 % of the steepest that the wings allow. All inside
  ranges,            // a narrow range of strikes at one expiry, a wide one at the next, and the
                     // other way round. All inside; no arbitrage where only one is quoted
  intrinsic_bids,    // many bids at intrinsic value, whose volatility is 0. All inside
  noisy,             // mids off by a random part of their spread. All inside
  mixed,             // of all these, 2 to 12 slices. The rest inside but for a few next to the
                     // offenders
};
inline constexpr std::size_t kChainKinds = 19;
std::string_view word(ChainKind kind);

// Total variance at log-moneyness k.
using Smile = std::function<double(double k)>;

struct QuoteIndex {
  std::size_t slice, quote;
  bool operator==(const QuoteIndex&) const = default;
};

struct AdversarialChain {
  std::string kind;
  std::uint64_t seed = 0;
  std::vector<surface::FitSlice> slices;  // quotes by k, distinct
  // One a slice, free of arbitrage. Inside the spread of every
  // quote that is no offender.
  std::vector<Smile> truth;
  std::vector<QuoteIndex> offenders;       // those put where the truth is not, in order
  bool free_surface_exists_inside = true;  // no offenders
};

AdversarialChain adversarial_chain(ChainKind kind, std::uint64_t seed);

// Undiscounted call price over the forward, from total volatility.
double call_over_forward(double k, double total_vol);
// Whether the bid of quote `at` buys more than a combination of its neighbours' asks: a butterfly
// that pays for itself. False at the ends.
bool breaks_butterfly(const surface::FitSlice& slice, std::size_t at);

}  // namespace duskgrid::oracle
