// From American prices to volatilities, for the quotes of one expiry of an underlying that pays
// known dividends inside its time, and the European price at the volatility found in the same
// model: spot lognormal between dividends, falling by them (american_dividends.h).
//
// The premium of exercise is tabled once an expiry, side and interval of volatility
// (american_dividend_panel.h), for all strikes; a volatility then costs a few evaluations of the
// table and of Black's formula. Without a dividend inside the time it is american_batch.h.
#pragma once

#include <span>

#include "pricing/american_batch.h"
#include "pricing/american_dividend_panel.h"

namespace duskgrid::pricing {

// Dividends at or before now, or at or after expiry, have no effect; in any order.
struct DividendColumnTerms {
  AmericanColumnTerms terms;
  std::span<const Dividend> dividends;
  Shortfall shortfall = Shortfall::liquidator;
};

// A value of tables; may be shared by threads.
class DividendInverter {
 public:
  // What american_batch.h says of columns and statuses, and
  // - vol is the model's, of the spot between dividends, at which the American price is that asked
  // - not_finite also where a dividend is not finite, negative, a share of 1 or more, or as large
  //   as the forward of its time
  // - not_converged next to an exercise boundary that tables do not follow, one about to vanish
  // before
  //   a dividend or far from the strike: deep in the money; and where rates move the spot by more
  //   than 20 total volatilities.
  // Accuracy: docs/american.md.
  AmericanCounts invert(const DividendColumnTerms& terms, const PriceColumns& columns,
                        const AmericanVolColumns& out) const;

 private:
  AmericanInverter without_;
};

}  // namespace duskgrid::pricing
