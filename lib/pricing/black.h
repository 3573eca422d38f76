// Black (1976) prices and their derivatives in the normalised form that the
// inversion solves. Not for early exercise.
//
// Normalised: x = ln(F/K), s = sigma sqrt(t) the total volatility, and
//   b(x, s) = e^{x/2} N(x/s + s/2) - e^{-x/2} N(x/s - s/2),
// so that a call is D sqrt(F K) b(x, s) and a put D sqrt(F K) b(-x, s). For x <= 0
// (out of the money) b runs from 0 to e^{x/2}.
#pragma once

#include "quotes/quote.h"

namespace duskgrid::pricing {

// exp(x^2) erfc(x). Relative error below 4 ulp for x >= -1, where it matters; grows as the
// rounding of x^2 below that; +inf past x = -26.6.
// W. J. Cody, Math. Comp. 23 (1969) 631-637.
double scaled_erfc(double x);

// Standard normal distribution function and density. Full relative accuracy in the lower tail.
double normal_cdf(double x);
double normal_pdf(double x);

// ln(forward / strike), accurate also where the two nearly agree.
double log_moneyness_of_forward(double forward, double strike);

// b(x, s) of an out-of-the-money option, x <= 0, s >= 0. Relative error of the order
// of max(1, (x/s)^2) ulp, which is what the conditioning of the inversion leaves.
double normalised_price(double x, double s);
// b over its factor exp(-((x/s)^2 + s^2/4) / 2), x < 0 < s <= sqrt(-2x): has digits where b
// itself is below the smallest double.
double scaled_price(double x, double s);
// e^{x/2} - b(x, s), x <= 0: what is missing to the upper bound, without cancellation.
double normalised_gap(double x, double s);
// db/ds, x of either sign, s > 0.
double normalised_vega(double x, double s);

// One European option. forward, strike > 0 in quote currency; discount_factor > 0;
// total_vol = sigma sqrt(t) >= 0.
struct BlackTerms {
  quotes::PutCall put_call;
  double forward;
  double strike;
  double discount_factor;
};

// Present value in quote currency. NaN only for NaN inputs.
double black_price(const BlackTerms& terms, double total_vol);
// Value when total_vol is 0, and the bound as it grows without limit.
double discounted_intrinsic(const BlackTerms& terms);
double upper_bound(const BlackTerms& terms);

// Derivatives for a chain whose forward moves with the spot. t in years.
struct Greeks {
  double delta;  // d price / d forward, discounted
  double gamma;  // d delta / d forward
  double vega;   // d price / d sigma, per 1.00 of volatility
};
Greeks black_greeks(const BlackTerms& terms, double vol, double year_fraction);

}  // namespace duskgrid::pricing
