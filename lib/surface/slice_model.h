// One slice's overlay in the making: its knots, its quotes as linear rows, its roughness and the
// places where arbitrage is looked for. Used by fit.cc alone.
//
// All is in units of the slice's own at-the-money deviation s0: z = k / s0, W = w / s0^2. Then
//   g = (1 - q)^2 - W'^2 / (4W) - (s0 W')^2 / 16 + W'' / 2,   q = z W' / (2W).
#pragma once

#include <Eigen/Dense>
#include <array>
#include <cstdint>
#include <vector>

#include "surface/backbone.h"
#include "surface/fit.h"
#include "surface/overlay.h"

namespace duskgrid::surface {

struct ScaledSmile {
  double w, slope, curvature;  // W, dW/dz, d2W/dz2
};

// Coefficients first .. first + 3 of the overlay and what they add to W and its derivatives.
struct ScaledBasis {
  Eigen::Index first = 0;
  std::array<double, 4> value{}, slope{}, curvature{};
};

// A place where the smile is looked at.
struct Probe {
  double k, z;
  ScaledBasis basis;
  ScaledSmile backbone;
};

// The misfit of a quote, in half-spreads from the mid, is offset + scale * (overlay's W).
struct QuoteRow {
  ScaledBasis basis;
  double k;
  double scale;      // half-spreads per unit of W, to first order about the mid
  double from_zero;  // misfit of W = 0
  double offset;     // misfit of the backbone
  double low, high;  // bid and ask, exact
  double weight;     // below 1 for quotes far from their neighbours
  bool stray;        // so far that it is left out of what the spreads ask for
};

// Conditions on a smile at one place, each >= 0: the slice's own butterfly and, for the last slice,
// that of every smile with variance added (docs/methods.md, 6.4).
enum class Condition : std::uint8_t { positive, butterfly, later_bend, later_turn };
// Value of the condition and its derivatives in W, W', W''.
struct Conditioned {
  double value, by_w, by_slope, by_curvature;
};
Conditioned condition_at(Condition condition, const ScaledSmile& smile, double z, double s0);

class SliceModel {
 public:
  SliceModel(const FitSlice& data, const SliceParameters& shape, const FitOptions& options);

  // The largest roughness weight at which the quotes are as well inside their spreads, and as near
  // their mids for mids that err by a third of a half-spread, as any weight allows (V. A. Morozov's
  // discrepancy principle, the discrepancy being the spread).
  void choose_roughness(bool finely);
  // Then: whether the backbone does as well without an overlay.
  bool met_by_backbone() const;
  // Slopes dw/dk, left and right, with which the quotes end.
  std::array<double, 2> end_slopes() const;
  // Puts the overlay on another backbone; its roughness weight has to be chosen again, since a
  // spline makes up for the difference only so well.
  void rebase(const SliceParameters& wings);
  void roughen(double factor);

  Eigen::Index size() const { return static_cast<Eigen::Index>(knots_.size()) - 2; }
  double s0() const { return s0_; }
  const std::vector<QuoteRow>& quotes() const { return quotes_; }
  // The overlay without regard to arbitrage minimises x' hessian x / 2 + gradient' x.
  const Eigen::MatrixXd& hessian() const { return hessian_; }
  const Eigen::VectorXd& gradient() const { return gradient_; }
  Eigen::VectorXd smooth() const;

  // Where to begin to look: within the knots, and ever wider apart in the tails, where the smile is
  // a hyperbola. Log-moneyness, increasing.
  std::vector<double> places() const;
  Probe probe_at(double k) const;
  ScaledSmile smile(const Probe& probe, const Eigen::VectorXd& x) const;
  double total_variance(const ScaledSmile& smile) const { return s0_ * s0_ * smile.w; }
  // Of the backbone that the slice was made with.
  double shape_variance(double k) const { return smile_at(shape_, k).w; }
  double misfit(const QuoteRow& quote, const Eigen::VectorXd& x) const;
  // Quotes outside their spreads, strays aside.
  std::size_t outside(const Eigen::VectorXd& x) const;
  // Density of ln(S/F), but for a factor.
  double density(const Probe& probe, const Eigen::VectorXd& x) const;
  Overlay overlay(const Eigen::VectorXd& x) const;

 private:
  void place_knots(const FitSlice& data, int most);
  void add_quote(const FitQuote& quote, double least_half_spread);
  void measure_roughness();
  void weigh_quotes();
  void find_strays(const Eigen::VectorXd& x);
  void assemble(double lambda);
  // By how much quotes are not well inside their spreads, together, half-spreads; and the mean
  // square of their misfits. Strays aside.
  struct Discrepancy {
    double over, square;
  };
  Discrepancy discrepancy(const Eigen::VectorXd& x) const;
  ScaledBasis basis_at_z(double z) const;
  ScaledSmile scaled(const SliceParameters& parameters, double z) const;

  SliceParameters shape_, backbone_;
  double s0_, t_;
  double quoted_low_ = 0, quoted_high_ = 0;  // z
  std::vector<double> knots_;                // z
  std::vector<QuoteRow> quotes_;
  // Roughness x' R x / 2 + r'x and misfit x' G x / 2 + p'x.
  Eigen::MatrixXd roughness_, misfit_, hessian_;
  Eigen::VectorXd roughness_pull_, misfit_pull_, gradient_;
  double lambda_ = 0;
  Discrepancy most_{0, 0};  // that the roughness weight may leave
};

}  // namespace duskgrid::surface
