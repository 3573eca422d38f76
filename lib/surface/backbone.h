// The eSSVI backbone: all slices of one underlying fitted together, free of butterfly
// and calendar arbitrage by construction. Not for times between slices: surface.h.
//
// A slice is w(k) = (theta + rho psi k + sqrt((psi k + rho theta)^2 + theta^2 (1 - rho^2))) / 2
// with psi = theta phi: J. Gatheral, A. Jacquier, Quantitative Finance 14 (2014) 59-71, eq. 4.1;
// one rho a slice: S. Hendriks, C. Martini, J. Comput. Finance 22(5) (2019).
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::surface {

struct SliceParameters {
  double theta;  // at-the-money total variance, > 0
  double rho;    // in (-1, 1)
  double psi;    // >= 0
};

// Total variance at log-moneyness k and its derivatives in k.
struct SmilePoint {
  double w;
  double dw_dk;
  double d2w_dk2;
};
SmilePoint smile_at(const SliceParameters& slice, double k);

// Durrleman's function g(k); a slice is free of butterfly arbitrage iff g >= 0
// everywhere (and the wings are in order). Gatheral & Jacquier 2014, lemma 2.2.
double durrleman(const SmilePoint& point, double k);

// One quote to fit. Vols in decimals a year; half_spread of vol, > 0.
struct FitQuote {
  double k;
  double vol;
  double half_spread;
  // Where the spread ends: finite, vol between them; 0 for a bid at intrinsic.
  double vol_bid = vol - half_spread;
  double vol_ask = vol + half_spread;
};

struct FitSlice {
  double year_fraction;  // > 0, increasing over the slices
  std::vector<FitQuote> quotes;
};

struct BackboneOptions {
  // Misfit, in half-spreads, past which a quote pulls with constant force instead of
  // growing force. Range: > 0. Smaller lets stray quotes and kinks be missed, larger spreads their
  // misfit over the neighbours.
  double huber_half_spreads = 1.0;
  // Smallest half-spread of vol a quote is credited with. Range: > 0. Smaller
  // lets one tight quote outweigh a slice.
  double least_half_spread = 1e-4;
  // Most iterations of each start. Range: >= 1.
  int most_iterations = 200;
  std::optional<std::string> problem() const;
};

enum class FitEnd : std::uint8_t { converged, stopped_early };

struct BackboneFit {
  std::vector<SliceParameters> slices;  // as many as given, in order
  FitEnd end;
  double cost;  // sum of Huber losses of the misfits in half-spreads
  int iterations;
};

// Fits all slices by bounded Levenberg-Marquardt on the global parametrisation of
// A. Mingone, arXiv 2204.00312 (2022), in which every parameter in its box is free of
// arbitrage. Each slice needs one quote or more; what 1 to 4 quotes leave open is
// taken from the neighbouring slices by a weak pull (one quote alone gives a level).
// Failure: not_enough_data without slices or with an empty one. Cost a step: linear in quotes
// and in slices. Deterministic.
Result<BackboneFit> fit_backbone(std::span<const FitSlice> slices, const BackboneOptions& options);

}  // namespace duskgrid::surface
