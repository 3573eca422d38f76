// Early-exercise premiums on a spot that pays known dividends, for all strikes of one side of one
// expiry: a table over distance from the boundary, strike and volatility. What
// american_dividend_batch.h inverts with.
//
// Prices scale with spot, strike and dividends together, so that one grid in ln(S/K) for a unit
// strike serves all spots, and what is left is a weak dependence on cash dividends over the strike.
// Strikes and volatilities are tabled at Chebyshev points, one pair a SIMD lane. In z = x / s (s
// the total volatility) and with V = e^{alpha x + beta tau} u every lane solves the same heat
// equation u_tau = u_zz / 2, by Crandall's differences (fourth order; S. Crandall, Quart. Appl.
// Math. 13 (1955) 318-320) with constant coefficients; the exercise constraint by M. Brennan, E.
// Schwartz, J. Finance 32(2) (1977) 449-462. Steps of time are those of american_dividends.h.
//
// American and European prices are taken from the same grid: their difference, the premium, loses
// what the grid does to both. The European price is Black's, each cash dividend replaced by its
// share of the forward, plus a correction that is solved for itself and starts from nothing.
#pragma once

#include <array>
#include <vector>

#include "pricing/american_dividends.h"

namespace duskgrid::pricing {

// A dividend inside the time, which is the unit of time.
struct PanelDividend {
  double time;
  DividendKind kind;
  double amount;
  double share;  // of the forward of the time: what Black's part takes off
};

struct DividendProblem {
  quotes::PutCall put_call;
  double rate, yield;  // times the time
  Shortfall shortfall;
  std::vector<PanelDividend> dividends;  // latest first
};

struct DividendPanelOptions {
  double spacing = 0.1;               // of the grid, in total volatilities
  std::size_t steps = 30;             // of time, shared by root of length among the intervals
  std::size_t least_steps = 8;        // of an interval
  std::size_t strikes = 4, vols = 4;  // nodes, the product a multiple of 8; 8 at most of each
};

struct DividendPanel {
  double low = 0, high = 0;                // total volatilities
  double low_strike = 0, high_strike = 0;  // quote currency
  std::size_t strikes = 0, vols = 0;       // nodes; a lane is strike * vols + vol
  bool bounded = false;                    // every lane has a boundary: rows begin there
  double spacing = 0;
  std::size_t rows = 0;
  std::vector<double> strike_points, vol_points;  // of the logarithms
  std::size_t points = 0;
  double at_strike = 0;
  double sure = 0;  // points from here on are exercised in a lane, though the table is not bounded
  std::vector<double> starts;      // a lane: the point of row 0
  std::vector<double> premium;     // rows x lanes: American less European, a unit strike
  std::vector<double> correction;  // points x lanes: European less Black
};

DividendPanel make_dividend_panel(const DividendProblem& problem, double low, double high,
                                  double low_strike, double high_strike,
                                  const DividendPanelOptions& options = {});

struct DividendExcess {
  double premium, correction;
  bool exercised;  // in the exercise region; the rest is 0
  bool sure;       // false next to a boundary that the rows do not follow
};

// Weights of the strike's nodes, shared by all that is asked of one strike.
inline constexpr std::size_t kMostNodes = 8;
using StrikeWeights = std::array<double, kMostNodes>;
StrikeWeights strike_weights(const DividendPanel& panel, double strike);
DividendExcess excess_at(const DividendPanel& panel, const StrikeWeights& strike_weights,
                         bool is_put, double log_spot, double total_vol);

}  // namespace duskgrid::pricing
