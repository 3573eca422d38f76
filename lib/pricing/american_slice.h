// From the American quotes of one expiry to European prices of the same volatility, with which
// everything after carries on.
#pragma once

#include <cmath>
#include <vector>

#include "market/dividends.h"
#include "pricing/american_dividend_batch.h"
#include "quotes/chain.h"
#include "quotes/quote.h"

namespace duskgrid::pricing {

// A firm side of a quote: there, finite and positive.
inline bool firm(double side) { return std::isfinite(side) && side > 0; }

// What early exercise depends on, beside the quotes.
struct ExerciseTerms {
  market::Financing financing;
  std::vector<market::Dividend> dividends;  // by time
};

// Volatilities and European prices of American ones. Where cash dividends fall before expiry the
// volatility is that of the spot between them.
void invert_american(const DividendInverter& inverter, const ExerciseTerms& terms,
                     const PriceColumns& columns, const AmericanVolColumns& out);

// One side of an American quote, or its mid, as a European one.
struct EquivalentSide {
  AmericanVolStatus status = AmericanVolStatus::not_finite;
  double price = quotes::kAbsent;  // European, quote currency
  // Of Black's formula, decimals a year; absent where it has to be found from the price: behind
  // cash dividends, since there it is not the model's.
  double vol = quotes::kAbsent;
};
struct EquivalentQuote {
  EquivalentSide bid, mid, ask;
};

// One a row of the slice; rows that are European, quoted in volatility or without a firm side
// keep their defaults.
std::vector<EquivalentQuote> european_equivalents(const DividendInverter& inverter,
                                                  const ExerciseTerms& terms,
                                                  const quotes::QuoteTable& table,
                                                  const quotes::ChainSlice& slice);

}  // namespace duskgrid::pricing
