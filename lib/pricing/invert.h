// From a European price to its Black (1976) implied volatility.
#pragma once

#include <string_view>

#include "pricing/black.h"

namespace duskgrid::pricing {

// Why there is, or is not, a volatility.
enum class VolStatus { ok, below_intrinsic, above_bound, not_finite };
std::string_view word(VolStatus status);

struct ImpliedVol {
  VolStatus status;
  double vol;  // decimals a year; 0 unless ok
};

// Total volatility s with b(x, s) = beta, for x <= 0 and 0 < beta < e^{x/2} (the caller
// checks). Error at most 4 ulp times the condition 1 + |dln s/dln beta| + |dln s/dln x|. The same
// algorithm, and the same bits, as the batch of invert_batch.h.
double invert_normalised(double x, double beta);

// Implied volatility of a European price in quote currency, year_fraction > 0 in years.
// A price at or below intrinsic is below_intrinsic, at or above the bound above_bound;
// inputs not finite or not positive where they must be, or F/K no normal number, are not_finite.
ImpliedVol implied_vol(const BlackTerms& terms, double price, double year_fraction);

}  // namespace duskgrid::pricing
