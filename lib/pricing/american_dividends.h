// American (and European) options on a spot that pays dividends at known times, cash amounts or
// shares of the spot: finite differences. Also prices what american.h refuses, exercise between two
// boundaries. Some 15 milliseconds a price, 10 more a dividend; the error of the default grid is
// below 1e-6 of the larger of spot and strike and mostly a hundredth of that, but for spots a hair
// from the exercise boundary (one random case in 2,000), where it has reached 2e-6.
//
// Between dividends the spot is lognormal with the drift rate - carry_yield. At an ex-dividend time
// it falls by the dividend, and the holder may exercise just before.
//
// Grid: spots K + a sinh(x), x evenly spaced, from 0 to seven deviations past the larger of spot
// and strike; three-point differences. Time: within each interval between dividends the steps grow
// linearly backwards from its end, which keeps second order where the boundary moves like the root
// of time (P. Forsyth, K. Vetzal, SIAM J. Sci. Comput. 23(6) (2002) 2095-2122); Crank-Nicolson, its
// first two steps as four of implicit Euler (R. Rannacher, Numer. Math. 43 (1984) 309-327). The
// exercise constraint is a linear complementarity problem solved each step by policy iteration
// (primal -dual active sets; M. Hintermueller, K. Ito, K. Kunisch, SIAM J. Optim. 13(3) (2002)
// 865-888). Two grids, the second twice as fine in both directions, are extrapolated to the limit.
#pragma once

#include <span>

#include "market/dividends.h"
#include "pricing/american.h"

namespace duskgrid::pricing {

using market::Dividend;
using market::DividendKind;

// What happens when the spot is less than a cash dividend. The words are those of E. G. Haug, J.
// Haug, A. Lewis, Wilmott (Sep. 2003) 37-51 (from memory).
enum class Shortfall {
  liquidator,  // the dividend paid is min(amount, spot): the spot falls to 0 and stays there
  survivor,    // the dividend is left out
};

enum class Style { american, european };

struct DividendOptions {
  Shortfall shortfall = Shortfall::liquidator;
  Style style = Style::american;
  std::size_t spots = 800;  // intervals of the coarser grid, 16 or more: error falls as its square
  std::size_t steps = 160;  // of time on the coarser grid, 8 or more, more at each dividend
};

struct DividendPrice {
  AmericanStatus status;  // ok or not_finite
  double price;           // quote currency; 0 unless ok
  double change;          // of extrapolation over the finer grid: far more than the error of price
};

// vol sqrt(t) from 1e-3 to 5; else, and for any argument not finite or outside its range,
// not_finite.
DividendPrice price_with_dividends(const AmericanTerms& terms, double vol,
                                   std::span<const Dividend> dividends,
                                   const DividendOptions& options = {});

}  // namespace duskgrid::pricing
