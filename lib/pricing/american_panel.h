// The early-exercise premium of all strikes of one expiry over an interval of volatility: a table
// of Chebyshev coefficients, made by collocating the boundaries of some volatilities at once, one a
// SIMD lane. What american_batch.h inverts with. The method is that of american.h with fewer nodes.
#pragma once

#include <array>
#include <cstddef>

#include "pricing/american_rules.h"

namespace duskgrid::pricing {

// Size of a table: volatilities by distances from the boundary.
inline constexpr std::size_t kPanelVols = 8;
inline constexpr std::size_t kPanelSpots = 16;
// Distances run to this many total volatilities; beyond, the premium is below 1e-11 of the
// strike and taken as nothing.
inline constexpr double kPanelReach = 9;

// A put of unit strike and unit time with the integrated rate r t and yield q t (of the side
// american.h calls one_side), total volatilities from low to high. The premium is
// exp(p(y, s)) with y = (ln S - ln B(s)) / s, both polynomials in c(ln s), and in y.
struct PremiumPanel {
  double low = 0, high = 0;
  bool converged = false;  // every boundary was found and every premium is positive
  std::array<double, kPanelVols> log_boundary{};
  std::array<double, kPanelVols * kPanelSpots> log_premium{};  // row a spot order
};

struct PanelPremium {
  double value;    // 0 beyond the reach
  double slope;    // by total volatility at a fixed spot
  double error;    // of interpolation, estimated by what the last orders of both variables add
  bool exercised;  // the spot is at or below the boundary: the rest is 0
};

// At ln S = log_spot of unit strike, total_vol within the panel or a little beyond.
PanelPremium premium_at(const PremiumPanel& panel, double log_spot, double total_vol);

// Makes panels. The same bits on every SIMD width. A value of tables; may be shared by threads.
class PanelMaker {
 public:
  PanelMaker();
  PremiumPanel make(double rate, double yield, double low, double high) const;

  // Nodes and points (n, l, p of american.h) of the boundary and the premium.
  static constexpr std::size_t kNodes = 10, kPoints = 14, kPremiumPoints = 24;

 private:
  CollocationRule collocation_;
  AgeRule premium_;
  // Chebyshev points of the first kind, and values to coefficients.
  std::array<double, kPanelVols> vol_points_;
  std::array<double, kPanelSpots> spot_points_;
  std::array<double, kPanelVols * kPanelVols> vol_transform_;
  std::array<double, kPanelSpots * kPanelSpots> spot_transform_;
};

}  // namespace duskgrid::pricing
