// Implied volatilities of whole columns, by the widest SIMD the machine has. The same bits
// on every width (invert_kernel-inl.h).
#pragma once

#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "pricing/invert.h"

namespace duskgrid::pricing {

// What the contracts of one expiry share. forward in quote currency, year_fraction in years; all >
// 0.
struct ColumnTerms {
  double forward;
  double discount_factor;
  double year_fraction;
};

// Columns of equal length. A price that is not finite gives not_finite.
struct PriceColumns {
  std::span<const double> strikes;  // quote currency
  std::span<const quotes::PutCall> put_calls;
  std::span<const double> prices;  // quote currency, European
};

// vols and statuses, as long as the columns, get what implied_vol() gives for each element.
void implied_vols(const ColumnTerms& terms, const PriceColumns& columns, std::span<double> vols,
                  std::span<VolStatus> statuses);

// Total volatilities s with b(x, s) = beta; x <= 0 and 0 < beta < e^{x/2} (the caller checks).
// Error at most 4 ulp times the condition 1 + |dln s/dln beta| + |dln s/dln x|.
void invert_normalised(std::span<const double> x, std::span<const double> beta,
                       std::span<double> total_vols);

// The SIMD targets this machine can run, widest first, and the choice of one of them for
// measurements and tests: all later calls of this process use it. An empty name is the widest.
std::vector<std::string> batch_targets();
void use_batch_target(const std::string& name);

}  // namespace duskgrid::pricing
