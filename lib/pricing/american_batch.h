// From American prices to volatilities, for the quotes of one expiry at once, and the European
// price at the volatility found, with which the European machinery carries on.
//
// By homogeneity the early-exercise premium of a strike depends on strike over spot and volatility
// alone: it is tabled once an expiry, side and interval of volatility (american_panel.h), for all
// strikes, only for the intervals that the quotes reach. A volatility then costs a few evaluations
// of the table and of Black's formula in Newton's method. Where the table's own error bound
// does not meet the promise, or the table could not be made, the reference engine takes over.
#pragma once

#include <span>
#include <string_view>

#include "pricing/american.h"
#include "pricing/american_panel.h"
#include "pricing/invert_batch.h"

namespace duskgrid::pricing {

enum class AmericanVolStatus {
  ok,
  below_intrinsic,     // less than exercise at the best fixed time is worth
  immediate_exercise,  // equal to intrinsic: any volatility up to a critical one explains it
  above_bound,         // at or above what the price tends to as volatility grows
  not_finite,          // an argument is not finite or outside its range
  two_boundaries,      // exercise between two boundaries (american.h), not inverted
  not_converged,       // the reference engine found no boundary (not met in tests), or the price is
                       // next to one that the tables of american_dividend_batch.h do not follow
};
std::string_view word(AmericanVolStatus status);

// What the quotes of one expiry share; spot > 0 in quote currency, continuous rates a year, of
// either sign, year_fraction > 0. The forward is spot exp((rate - carry_yield) t).
struct AmericanColumnTerms {
  double spot;
  double rate;
  double carry_yield;
  double year_fraction;
};
// The same from a forward and a discount factor.
AmericanColumnTerms american_terms(double spot, const ColumnTerms& terms);

// Columns as long as the prices'. vol and European price are 0 unless ok.
struct AmericanVolColumns {
  std::span<double> vols;             // decimals a year
  std::span<double> european_prices;  // quote currency, at that vol
  std::span<AmericanVolStatus> statuses;
};

struct AmericanCounts {
  std::size_t panels = 0;    // tables made
  std::size_t polished = 0;  // quotes that the reference engine had to take over
};

struct AmericanVol {
  AmericanVolStatus status;
  double vol;
  double european_price;
};

// A value of tables; may be shared by threads.
class AmericanInverter {
 public:
  // The price at the vol found is that asked to 1e-6 of the spot by the reference engine. The error
  // of the table is estimated by what its last orders add and a share of the premium.
  static constexpr double kPromise = 1e-6;

  AmericanCounts invert(const AmericanColumnTerms& terms, const PriceColumns& columns,
                        const AmericanVolColumns& out) const;
  // One quote by the reference engine alone: the price is met to 1e-12 of the strike.
  AmericanVol invert_by_reference(const AmericanTerms& terms, double price) const;
  // The same from a vol that nearly has the price, and the price's slope by vol there: to 1e-9 of
  // the spot, or not_converged.
  AmericanVol improve(const AmericanTerms& terms, double price, double vol, double vega) const;

 private:
  AmericanEngine engine_;
  PanelMaker maker_;
};

}  // namespace duskgrid::pricing
