// Derivatives of a surface with overlays, and what follows from them, against independent routes:
// differences in 50 digits, integrals of the density, the strip of options, and a forward equation
// that re-prices the surface from its own local variance.
#include <gtest/gtest.h>

#include <Eigen/Dense>
#include <algorithm>
#include <boost/math/quadrature/exp_sinh.hpp>
#include <boost/math/quadrature/tanh_sinh.hpp>
#include <cmath>
#include <iostream>
#include <map>
#include <numbers>
#include <string>

#include "pricing/invert.h"
#include "surface/derived.h"
#include "wide_surface.h"

namespace duskgrid::surface {
namespace {

constexpr double kEps = std::numeric_limits<double>::epsilon();

std::vector<double> even_knots(double low, double high, int count) {
  std::vector<double> knots;
  for (int i = 0; i < count; ++i) knots.push_back(low + (high - low) * i / (count - 1));
  return knots;
}

// A first smile of the shape of a W, as before an event, and bumps of some hundredths of the total
// variance on the others; constants in the wings that are not 0.
Surface made(Between rule) {
  Surface s{"HALYRD",
            100,
            {{quotes::Instant{}, 0.25, 101, 0.99, {0.01, -0.1, 0.06}, -0.3, 0.2},
             {quotes::Instant{}, 0.75, 103, 0.97, {0.03, -0.4, 0.25}, -0.5, 0.3},
             {quotes::Instant{}, 2.00, 107, 0.91, {0.09, -0.3, 0.45}, -0.8, 0.6}}};
  s.slices[0].overlay = {even_knots(-0.31, 0.22, 10),
                         {0.0006, 0.0004, -0.0002, -0.0006, 0.0014, -0.0008, 0, 0.0004}};
  s.slices[1].overlay = {{-0.52, -0.4, -0.25, -0.16, -0.05, 0.03, 0.17, 0.31},
                         {0.0004, -0.0005, 0.0003, 0.0008, 0.0004, 0.0006}};
  s.slices[2].overlay = {
      even_knots(-0.83, 0.61, 12),
      {0.001, 0.002, 0.001, -0.001, -0.001, 0.001, 0.002, 0.001, 0.0006, 0.0012}};
  for (Slice& slice : s.slices) slice.to_next = rule;
  return s;
}

// Before, at, between and after the expiries.
const std::vector<double> kTimes{0.01, 0.13, 0.25, 0.2501, 0.4, 0.74,
                                 0.75, 1.3,  2.0,  2.0001, 2.5, 4.5};

const std::map<std::string, Between> kRules{{"variance", Between::variance},
                                            {"price", Between::price}};

double durrleman_of(const SurfacePoint& p, double k) {
  return durrleman({p.w, p.dw_dk, p.d2w_dk2}, k);
}

double deviation(const TimedSmile& smile) { return std::sqrt(smile.at(0).w); }

TEST(MadeSurface, IsFreeOfArbitrageOnDensePoints) {
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    double least_g = 1, least_growth = 1;
    for (const double t : kTimes) {
      const TimedSmile smile(surface, t);
      for (int i = -3000; i <= 3000; ++i) {
        const double k = 15 * deviation(smile) * i / 3000;
        const SurfacePoint p = smile.at(k);
        least_g = std::min(least_g, durrleman_of(p, k));
        least_growth = std::min(least_growth, p.dw_dt);
      }
    }
    EXPECT_GT(least_g, 0.01) << name;
    EXPECT_GT(least_growth, 0) << name;
    std::cout << name << ": least g " << least_g << ", least dw/dt " << least_growth << '\n';
  }
}

TEST(MadeSurface, BeginsWithAW) {
  const Surface surface = made(Between::variance);
  int turns = 0;
  double before = -1;
  for (int i = -200; i <= 200; ++i) {
    const double slope = point_at(surface, 0.001 * i, 0.25).dw_dk;
    turns += (slope > 0) != (before > 0);
    before = slope;
  }
  EXPECT_EQ(turns, 3);
}

// Sizes of the terms that a point's numbers are summed from; where they cancel, it is these that
// round.
struct Scales {
  double slope, curvature, g, far;  // far: 1 + d1^2, by which exponents spread rounding
};
Scales scales_of(const SurfacePoint& p, double k) {
  const double s = std::sqrt(p.w), ds = 0.5 * p.dw_dk / s, d1 = 0.5 * s - k / s;
  const double turn = 1 - k * ds / s, g = std::abs(durrleman_of(p, k));
  const double terms = g + turn * turn + 0.25 * p.w * ds * ds;
  return {2 * s * (std::abs(ds) + 1 / (1 + std::abs(d1))), 2 * (ds * ds + terms), terms,
          1 + d1 * d1};
}

// Each is rounding of a handful of operations in units of eps times the scales above.
constexpr double kHandful = 16;

// The share of the late price in a mixture is a difference of prices over another and loses digits
// near the early end; a relative change of it moves the volatility by s^2/k^2 of that.
double share_loss(const Surface& surface, double t, double far) {
  const WideEnds ends = wide_ends(surface, t);
  const double share = static_cast<double>(ends.share);
  return ends.early && ends.late && ends.rule == Between::price ? 1 / (share * far) : 0;
}

// The same with wings so thin that prices leave the range of doubles some 37 deviations out.
Surface thin(Between rule) {
  Surface s = made(rule);
  for (Slice& slice : s.slices) slice.backbone.psi *= 0.02;
  return s;
}

TEST(TimedSmile, DerivativesAgreeWithDifferencesInFiftyDigits) {
  // Steps of 1e-13 in k and t: truncation 1e-26 times third derivatives, which are below 1e6 here
  // (of t near 0: below 1e4 w); rounding 1e-50 over the square of the step, 1e-24.
  const Wide h = 1e-13;
  const std::map<std::string, Surface> surfaces{
      {"variance", made(Between::variance)},
      {"price", made(Between::price)},
      {"price, thin wings", thin(Between::price)},
  };
  for (const auto& [name, surface] : surfaces) {
    double worst[4] = {};
    for (const double t : kTimes) {
      const TimedSmile smile(surface, t);
      const bool inside = t != 0.25 && t != 0.75 && t != 2.0;
      for (const double x : {-60.0, -45.0, -38.3, -30.0, -12.0, -5.0, -3.1, -2.0, -1.3, -0.4, 0.0,
                             0.3,   0.9,   1.7,   2.6,   4.0,   8.0,  20.0, 37.7, 50.0, 60.0}) {
        const double k = x * deviation(smile);
        const SurfacePoint p = smile.at(k);
        const auto w = [&](const Wide& at, const Wide& time) {
          return wide_w(surface, at, time, p.w);
        };
        const Wide up = w(k + h, t), at = w(k, t), down = w(k - h, t);
        const double slope = static_cast<double>((up - down) / (2 * h));
        const double curvature = static_cast<double>((up - 2 * at + down) / (h * h));
        const Scales scale = scales_of(p, k);
        const double loss = 1 + share_loss(surface, t, scale.far);
        const double unit = kEps * scale.far * loss;
        const double miss[4] = {
            (p.w / static_cast<double>(at) - 1) / (kEps * loss),
            (p.dw_dk - slope) / (unit * scale.slope),
            (p.d2w_dk2 - curvature) / (unit * scale.curvature),
            inside
                ? (p.dw_dt / static_cast<double>((w(k, t + h) - w(k, t - h)) / (2 * h)) - 1) / unit
                : 0};
        for (int i = 0; i < 4; ++i) {
          EXPECT_LT(std::abs(miss[i]), kHandful)
              << name << " t " << t << " k " << k << " (" << x << " deviations), number " << i;
          worst[i] = std::max(worst[i], std::abs(miss[i]));
        }
      }
    }
    std::cout << name
              << ": worst errors of w, dw/dk, d2w/dk2, dw/dt in units of rounding: " << worst[0]
              << ' ' << worst[1] << ' ' << worst[2] << ' ' << worst[3] << '\n';
  }
}

// The same at an expiry from before: the derivative of the times that lead to it.
TEST(TimedSmile, TimeDerivativeAtAnExpiryIsThatOfTheTimesBefore) {
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    for (const double t : {0.25, 0.75, 2.0})
      for (const double k : {-2.0, -0.4, 0.0, 0.2, 1.5}) {
        const double at = point_at(surface, k, t).dw_dt;
        const double before = point_at(surface, k, std::nextafter(t, 0)).dw_dt;
        EXPECT_NEAR(at, before, 1e-11 * at) << name << ' ' << t << ' ' << k;
      }
  }
}

TEST(LogDensity, AgreesWithSecondDifferencesOfPricesInFiftyDigits) {
  // A step of 1e-14 of the strike: truncation 1e-28 times fourth derivatives of the price (1/s^3,
  // below 1e6), relative to the density 1e-20 out to 5 deviations; rounding 1e-50 / 1e-28.
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    double worst = 0;
    for (const double t : kTimes) {
      const TimedSmile smile(surface, t);
      for (const double x : {-5.0, -3.1, -2.0, -1.3, -0.4, 0.3, 0.9, 1.7, 2.6, 4.0}) {
        const double k = x * deviation(smile);
        const SurfacePoint p = smile.at(k);
        const Wide strike = exp(Wide(k)), h = strike * 1e-14;
        const auto price = [&](const Wide& of) {
          const Wide at = log(of);
          return wide_price(at, sqrt(wide_w(surface, at, t, p.w)));
        };
        const double density = static_cast<double>(
            strike * (price(strike + h) - 2 * price(strike) + price(strike - h)) / (h * h));
        const auto found = log_density(p, k);
        ASSERT_TRUE(found.has_value());
        const Scales scale = scales_of(p, k);
        const double loss = 1 + share_loss(surface, t, scale.far);
        const double unit = kEps * loss * scale.far * scale.g / durrleman_of(p, k);
        const double miss = std::abs(*found / density - 1) / unit;
        EXPECT_LT(miss, kHandful) << name << " t " << t << " k " << k;
        worst = std::max(worst, miss);
      }
    }
    std::cout << name << ": worst error of the density " << worst << " units of rounding\n";
  }
}

// Integral of f in pieces between the overlays' knots, each deviation to 40 of them, and by
// doublings to 2560 or |k| = 600, where the prices and densities of these surfaces have ended.
template <class F>
double integral(const TimedSmile& smile, const F& f) {
  const double s = deviation(smile);
  std::vector<double> ends = smile.breaks();
  for (int i = -40; i <= 40; ++i) ends.push_back(s * i);
  for (double far = 80; far < 4000; far *= 2)
    for (const double side : {-1, 1}) ends.push_back(side * std::min(s * far, 600.0));
  std::sort(ends.begin(), ends.end());
  boost::math::quadrature::tanh_sinh<double> rule;
  double sum = 0;
  for (std::size_t i = 1; i < ends.size(); ++i) {
    const double middle = 0.5 * (ends[i] + ends[i - 1]), half = 0.5 * (ends[i] - ends[i - 1]);
    if (half == 0) continue;
    sum += half * rule.integrate([&](double y) { return f(middle + half * y); }, 1e-13);
  }
  return sum;
}

// Some 100 pieces of quadrature to 1e-13 each, and the rounding of as many sums.
constexpr double kQuadrature = 1e-11;

TEST(LogDensity, HasMassOneAndItsMeanIsTheForward) {
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    double worst = 0;
    for (const double t : kTimes) {
      const TimedSmile smile(surface, t);
      const auto density = [&](double k) { return log_density(smile.at(k), k).value(); };
      const double mass = integral(smile, density);
      const double mean = integral(smile, [&](double k) { return std::exp(k) * density(k); });
      EXPECT_NEAR(mass, 1, kQuadrature) << name << ' ' << t;
      EXPECT_NEAR(mean, 1, kQuadrature) << name << ' ' << t;
      worst = std::max({worst, std::abs(mass - 1), std::abs(mean - 1)});
    }
    std::cout << name << ": worst error of mass and mean " << worst << '\n';
  }
}

TEST(VarianceSwap, IsTheStripOfOptionsAndTheLogContract) {
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    double worst_strip = 0, worst_log = 0;
    for (const double t : kTimes) {
      const TimedSmile smile(surface, t);
      const auto swap = variance_swap(smile);
      ASSERT_TRUE(swap.has_value()) << name << ' ' << t;
      // dK / K^2 over the forward: e^-k dk.
      const double strip =
          integral(smile,
                   [&](double k) {
                     return std::exp(-0.5 * k) *
                            pricing::normalised_price(-std::abs(k), std::sqrt(smile.at(k).w));
                   }) *
          2 / t;
      const double log_contract =
          integral(smile, [&](double k) { return -2 * k * log_density(smile.at(k), k).value(); }) /
          t;
      EXPECT_NEAR(strip / swap->variance, 1, kQuadrature) << name << ' ' << t;
      // Up and down moves cancel in E ln: by 1/s, 50 at the earliest time.
      EXPECT_NEAR(log_contract / swap->variance, 1, kQuadrature / deviation(smile))
          << name << ' ' << t;
      worst_strip = std::max(worst_strip, std::abs(strip / swap->variance - 1));
      worst_log = std::max(worst_log, std::abs(log_contract / swap->variance - 1));
    }
    std::cout << name << ": variance swap against the strip " << worst_strip
              << ", against the log contract " << worst_log << '\n';
  }
}

// Left wings up to nearly 2 |k|, where half of the integral lies thousands of deviations out; the
// slices are inside the conditions of Gatheral & Jacquier 2014, theorem 4.2.
TEST(VarianceSwap, IsTheStripOfOptionsInHeavyWingsToo) {
  // Double exponential quadrature of a function with one bend, asked for 1e-13.
  constexpr double kTails = 1e-11;
  double worst = 0;
  for (const double slope : {1.0, 1.5, 1.9, 1.98}) {
    const Surface surface{
        "HALYRD", {}, {{quotes::Instant{}, 10, 100, 1, {4, -0.9, 2 * slope / 1.9}, -1, 1}}};
    const TimedSmile smile(surface, 10);
    const auto option = [&](double k) {  // over the strike
      return std::exp(-0.5 * k) * pricing::normalised_price(-std::abs(k), std::sqrt(smile.at(k).w));
    };
    // Where e^{k/2} underflows but the put over its strike has not:
    // N(-d2) - n(d2) N(-d1) / n(d1).
    const auto put = [&](double x) {
      if (x < 600) return option(-x);
      const double s = std::sqrt(smile.at(-x).w), d2 = x / s - 0.5 * s;
      const double mills =
          std::sqrt(0.5 * std::numbers::pi) * pricing::scaled_erfc((d2 + s) / std::numbers::sqrt2);
      return pricing::normal_cdf(-d2) - pricing::normal_pdf(d2) * mills;
    };
    boost::math::quadrature::exp_sinh<double> rule;
    const double strip = (rule.integrate(put, 1e-13) + rule.integrate(option, 1e-13)) * 2 / 10;
    const auto swap = variance_swap(smile);
    ASSERT_TRUE(swap.has_value()) << slope;
    worst = std::max(worst, std::abs(strip / swap->variance - 1));
  }
  EXPECT_LT(worst, kTails);
  std::cout << "worst error in heavy wings " << worst << '\n';
}

// Dupire's forward equation for C(t, k) / F at fixed k = ln(K/F_t):
//   dC/dt = v (C'' - C') / 2,  C(0, k) = max(1 - e^k, 0),
// Crank-Nicolson in t with the local variance v half way, second differences in y, k = a sinh(y).
class ForwardEquation {
 public:
  ForwardEquation(const Surface& surface, int half_nodes)
      : surface_(surface), y_step_(std::asinh(kReach / kStretch) / half_nodes) {
    const auto y = y_step_ * Eigen::ArrayXd::LinSpaced(2 * half_nodes + 1, -half_nodes, half_nodes);
    k_ = kStretch * y.sinh();
    stretch_ = kStretch * y.cosh();
    price_ = (1 - k_.array().exp()).max(0);
  }

  // To `to` in `steps`; from 0 their lengths grow evenly, as the first prices spread, and the first
  // is taken in four implicit steps, which damp the kink (R. Rannacher, Numer. Math. 43 (1984)).
  void advance(double to, int steps) {
    const double from = t_;
    for (int n = 1; n <= steps; ++n) {
      const double share = static_cast<double>(n) / steps;
      const double next = from + (to - from) * (from == 0 ? share * share : share);
      const int parts = t_ == 0 ? 4 : 1;
      const double length = (next - t_) / parts;
      for (int i = 0; i < parts; ++i) step(length, parts == 4 ? 1 : 0.5);
      t_ = next;
    }
    t_ = to;
  }

  // Largest error of volatility at nodes up to `deviations` from the money.
  double worst_vol(double deviations) const {
    const TimedSmile smile(surface_, t_);
    const double reach = deviations * deviation(smile);
    double worst = 0;
    for (int i = 0; i < k_.size(); ++i) {
      if (std::abs(k_[i]) > reach) continue;
      const double call = price_[i], otm = k_[i] < 0 ? call - 1 + std::exp(k_[i]) : call;
      const double s = pricing::invert_normalised(-std::abs(k_[i]), otm * std::exp(-0.5 * k_[i]));
      worst = std::max(worst, std::abs(s - std::sqrt(smile.at(k_[i]).w)) / std::sqrt(t_));
    }
    return worst;
  }

 private:
  static constexpr double kStretch = 0.1, kReach = 8;

  // One step of the theta method: (1 - theta h A) new = (1 + (1 - theta) h A) old.
  void step(double h, double theta) {
    const TimedSmile smile(surface_, t_ + 0.5 * h);
    const auto n = k_.size();
    Eigen::VectorXd below = Eigen::VectorXd::Zero(n), at = below, above = below;
    for (Eigen::Index i = 1; i + 1 < n; ++i) {
      const double v = local_variance(smile.at(k_[i]), k_[i]).value();
      const double j = stretch_[i], bend = k_[i] / (j * j);  // of k'' = k
      const double second = 0.5 * v / (j * j * y_step_ * y_step_);
      const double first = 0.25 * v * (bend + 1) / (j * y_step_);
      below[i] = second + first;
      above[i] = second - first;
      at[i] = -2 * second;
    }
    Eigen::VectorXd right = price_;
    for (Eigen::Index i = 1; i + 1 < n; ++i)
      right[i] += (1 - theta) * h *
                  (below[i] * price_[i - 1] + at[i] * price_[i] + above[i] * price_[i + 1]);
    solve(1 - (theta * h * at).array(), -theta * h * below, -theta * h * above, right);
    price_ = right;
    t_ += h;
  }

  // Tridiagonal system, without pivoting: the diagonal dominates.
  static void solve(Eigen::VectorXd at, const Eigen::VectorXd& below, const Eigen::VectorXd& above,
                    Eigen::VectorXd& x) {
    for (Eigen::Index i = 1; i < x.size(); ++i) {
      const double factor = below[i] / at[i - 1];
      at[i] -= factor * above[i - 1];
      x[i] -= factor * x[i - 1];
    }
    for (Eigen::Index i = x.size(); i-- > 0;)
      x[i] = (x[i] - (i + 1 < x.size() ? above[i] * x[i + 1] : 0)) / at[i];
  }

  const Surface& surface_;
  double y_step_, t_ = 0;
  Eigen::VectorXd k_, stretch_, price_;
};

// Largest errors at the three expiries.
std::vector<double> repriced(const Surface& surface, int half_nodes, int steps) {
  ForwardEquation equation(surface, half_nodes);
  std::vector<double> errors;
  for (const Slice& slice : surface.slices) {
    equation.advance(slice.year_fraction, steps);
    errors.push_back(equation.worst_vol(2.5));
  }
  return errors;
}

// Both schemes are of second order, so halved steps leave a quarter of the error; terms of third
// order and the knots, where the curvature of v jumps, are allowed a sixth of that.
constexpr double kQuarter = 4, kOtherOrders = 4.0 / 6;
// What is left on the finest grid, in vol points: its nodes are 0.013 deviations of the first
// expiry apart, and errors of the order of the square of that, 1.6e-4, of vols of 20 points.
constexpr double kFinest = 0.003;

TEST(LocalVariance, RepricesTheSurfaceThroughItsForwardEquation) {
  for (const auto& [name, rule] : kRules) {
    const Surface surface = made(rule);
    const auto coarse = repriced(surface, 100, 40), fine = repriced(surface, 200, 80),
               finest = repriced(surface, 400, 160);
    for (std::size_t i = 0; i < finest.size(); ++i) {
      EXPECT_LT(100 * finest[i], kFinest) << name << ' ' << i;
      EXPECT_NEAR(coarse[i] / fine[i], kQuarter, kOtherOrders) << name << ' ' << i;
      EXPECT_NEAR(fine[i] / finest[i], kQuarter, kOtherOrders) << name << ' ' << i;
      std::cout << name << ", expiry " << i + 1 << ": errors " << 100 * coarse[i] << ' '
                << 100 * fine[i] << ' ' << 100 * finest[i] << " vol points\n";
    }
  }
}

}  // namespace
}  // namespace duskgrid::surface
