// Judging the quotes of one expiry once its forward is known: their volatilities, the
// bounds, and which of them the fit uses.
#pragma once

#include <optional>
#include <span>
#include <string>

#include "pricing/american_slice.h"
#include "quotes/chain.h"
#include "quotes/quote.h"

namespace duskgrid::pricing {

struct SelectionOptions {
  // Furthest strike fitted, in at-the-money deviations from the forward. Range: > 0.
  double far_deviations = 12.0;
  // Most quotes of one expiry in the fit, 0 for all; the ones kept are evenly spaced in rank.
  int most_quotes = 0;
  // A quote is an outlier when it lies outside its neighbours' line by more than this
  // many times their and its own half-spreads of vol together, 0 to keep every quote. Range: >= 0.
  double outlier_half_spreads = 5.0;
  std::optional<std::string> problem() const;
};

struct SliceMarket {
  double year_fraction;    // > 0
  double forward;          // quote currency, > 0
  double discount_factor;  // > 0
};

// Fills vol_bid, vol_mid and vol_ask of every sound quote of the slice (and of the firm sides
// of one-sided and wide ones) and sets `reason`, first rule that applies, on those still
// without one: above-bound, below-intrinsic, no-vol, immediate-exercise, in-the-money, far-wing,
// outlier, thinned. American quotes are judged by `equivalents`, one a row of the slice; without
// them, and where the status is two_boundaries, they are taken as European. What is left is used:
// at each strike the out-of-the-money side, or the other where that one is not sound and this one's
// bid is above intrinsic. A quote in vol gets its prices' vols as quoted.
void select_quotes(quotes::QuoteTable& table, const quotes::ChainSlice& slice,
                   const SliceMarket& market, const SelectionOptions& options,
                   std::span<const EquivalentQuote> equivalents = {});

}  // namespace duskgrid::pricing
