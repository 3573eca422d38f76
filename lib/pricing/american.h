// American options under a continuous carry: the reference engine. Prices are exact to about 1e-10
// of the strike, 5e-9 where total volatility is above 2 or small beside the rates, and take half a
// millisecond; american_batch.h is the fast way from quotes to volatilities and is held against
// this one. Cash dividends: american_dividends.h.
//
// The put with rate r and carry yield q has the exercise boundary B(u), u the time left, and is the
// European put plus the integral of what exercise earns (I. Kim, Review of Financial Studies 3(4)
// (1990) 547-572; P. Carr, R. Jarrow, R. Myneni, Math. Finance 2 (1992) 87-106):
//   P = p + int_0^t [ r K e^{-rv} N(-d2(v, S/B(t-v))) - q S e^{-qv} N(-d1(v, S/B(t-v))) ] dv.
// B is collocated as L. Andersen, M. Lake, D. Offengenden, "High-performance American option
// pricing", J. Comput. Finance 20(1) (2016), propose: Chebyshev points in the root of time and
// ln(B/X)^2 interpolated. The equation solved is smooth pasting, less the terms that cancel by
// K e^{-rv} n(d2) = S e^{-qv} n(d1); it is solved by Newton's method on the whole boundary.
//
// A call is the put with spot and strike, and rate and yield, exchanged (R. McDonald, M. Schroder,
// J. Computational Finance 1(3) (1998) 5-13).
#pragma once

#include <string_view>

#include "pricing/american_rules.h"
#include "pricing/black.h"

namespace duskgrid::pricing {

// spot, strike > 0 in quote currency; rate and carry_yield continuous a year, of either sign, the
// forward being spot exp((rate - carry_yield) t); year_fraction >= 0.
struct AmericanTerms {
  quotes::PutCall put_call;
  double spot;
  double strike;
  double rate;
  double carry_yield;
  double year_fraction;
};

// Whether early exercise can pay, told by the signs of rate and yield alone.
enum class ExerciseKind {
  never,     // put: r <= 0 and q >= r, or r = 0 <= q. The price is European.
  one_side,  // exercised on one side of one boundary
  between,   // put with q < r < 0: exercised between two boundaries (or, later, nowhere)
};
ExerciseKind exercise_kind(quotes::PutCall put_call, double rate, double carry_yield);

enum class AmericanStatus {
  ok,
  two_boundaries,  // ExerciseKind::between; american_dividends.h prices it
  not_converged,   // the boundary was not found; not met in tests
  not_finite,      // an argument is not finite or outside its range
};
std::string_view word(AmericanStatus status);

struct AmericanPrice {
  AmericanStatus status;
  double price;          // present value in quote currency; 0 unless ok
  double european;       // of it, the European part
  double exercise_spot;  // exercised now at or beyond it; 0 for a put, +inf for a call if never
  bool immediate;        // the spot is there: price is spot less strike, or strike less spot
};

struct AmericanAccuracy {
  std::size_t boundary_nodes = 24;   // n of the paper, 4 or more
  std::size_t boundary_points = 48;  // l, quadrature in the equations of the boundary
  std::size_t premium_points = 121;  // p, quadrature of the price
  int newton_steps = 40;             // at most; 5 to 7 are usual
};

// beta at the nodes of the rule, for a put of unit time with the integrated rates r t and q t and
// total volatility s > 0. log_limit is ln(X/K).
struct PutBoundary {
  bool converged = false;
  bool perpetual = false;  // time does not matter: the put is worth the perpetual one
  bool flat = false;       // the boundary, if not the put, is that of the perpetual one
  double log_limit = 0;
  std::vector<double> beta;
};

// A value without state but its tables; may be shared by threads.
class AmericanEngine {
 public:
  explicit AmericanEngine(const AmericanAccuracy& accuracy = {});
  // vol >= 0, decimals a year. Never NaN.
  AmericanPrice price(const AmericanTerms& terms, double vol) const;
  // The boundary of a put with one side; rate r t, yield q t.
  PutBoundary put_boundary(double rate, double yield, double total_vol) const;

 private:
  AmericanAccuracy accuracy_;
  CollocationRule collocation_;
  AgeRule premium_;
};

// What exercise at the best fixed time is worth when nothing moves: the price for vol 0, and the
// least of all prices.
double american_floor(const AmericanTerms& terms);
// What the price tends to as the volatility grows without limit.
double american_ceiling(const AmericanTerms& terms);

}  // namespace duskgrid::pricing
