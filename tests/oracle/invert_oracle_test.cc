// Prices and implied volatilities against the same formulas in 50 decimal digits.
#include <gtest/gtest.h>

#include <boost/math/special_functions/erf.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <cstdlib>
#include <iostream>
#include <limits>
#include <map>
#include <random>
#include <string>
#include <vector>

#include "pricing/invert_batch.h"

namespace duskgrid::pricing {
namespace {

using Wide = boost::multiprecision::cpp_bin_float_50;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr unsigned kSeed = 20310314;
constexpr int kPoints = 20000;

// DUSKGRID_ORACLE_POINTS asks for fewer points where every instruction is slow (sanitizers).
int points() {
  const char* asked = std::getenv("DUSKGRID_ORACLE_POINTS");
  const int count = asked ? std::atoi(asked) : kPoints;
  return count > 0 ? count : kPoints;
}

Wide wide_cdf(const Wide& x) { return boost::math::erfc(Wide(-x / sqrt(Wide(2)))) / 2; }

struct WidePoint {
  Wide price, vega, slope_x;  // b, db/ds, db/dx
};

WidePoint wide_price(const Wide& x, const Wide& s) {
  const Wide up = exp(x / 2) * wide_cdf(x / s + s / 2),
             down = exp(-x / 2) * wide_cdf(x / s - s / 2);
  const Wide h = x / s;
  const Wide vega = exp(-(h * h + s * s / 4) / 2) / sqrt(2 * boost::math::constants::pi<Wide>());
  return {up - down, vega, (up + down) / 2};  // the densities cancel in db/dx
}

struct Draw {
  double x, s;
};

// Total volatility log-uniform over 1e-8 to 50; the log-moneyness 0, within a deviation
// (log-uniform), or up to 40 deviations.
Draw draw(std::mt19937_64& random) {
  std::uniform_real_distribution<double> unit(0, 1);
  const double s = std::exp(std::log(1e-8) + unit(random) * std::log(50 / 1e-8));
  const double sort = unit(random), u = unit(random);
  const double deviations = sort < 0.05 ? 0.0 : sort < 0.3 ? std::pow(10.0, -10 * u) : 40 * u;
  return {-deviations * s, s};
}

// The relative error of s that relative errors of one ulp in the price, in x and in s itself
// cannot avoid: 1 + |dln s / dln b| + |dln s / dln x|, with ds/db = 1/vega and ds/dx =
// -(db/dx)/vega.
double condition(double x, const Wide& s, const WidePoint& p) {
  return static_cast<double>(1 + (p.price + abs(x * p.slope_x)) / (s * p.vega));
}

// The exact s of the doubles x and beta, by Newton's steps from a value near it.
Wide exact_total_vol(double x, double beta, double near) {
  Wide s = near;
  for (int i = 0; i < 30; ++i) {
    const WidePoint p = wide_price(x, s);
    const Wide step = (p.price - beta) / p.vega;
    s -= step;
    if (abs(step) < 1e-25 * s) break;
  }
  return s;
}

// Where a point lies, for saying which region is worst.
std::string region(double x, double s) {
  const double deviations = -x / s;
  const char* money = deviations == 0  ? "at the money"
                      : deviations < 1 ? "under 1 deviation"
                      : deviations < 8 ? "1 to 8 deviations"
                                       : "8 to 40 deviations";
  const char* vol = s < 1e-3  ? "s below 0.001"
                    : s < 0.9 ? "s to 0.9"
                    : s < 5   ? "s to 5"
                              : "s to 50";
  return std::string(money) + ", " + vol;
}

struct Points {
  std::vector<double> x, beta, s;
};

// Prices that doubles cannot hold, or cannot tell from the bound, are no inversions.
Points drawn_points(std::size_t count) {
  std::mt19937_64 random(kSeed);
  Points out;
  while (out.x.size() < count) {
    const auto [x, s] = draw(random);
    const double beta = static_cast<double>(wide_price(x, s).price);
    if (beta < std::numeric_limits<double>::min() || beta >= std::exp(0.5 * x)) continue;
    out.x.push_back(x);
    out.beta.push_back(beta);
    out.s.push_back(s);
  }
  return out;
}

TEST(InvertNormalised, IsWithinFourUlpTimesTheConditionOfTheProblem) {
  constexpr double kPromised = 4;  // ulp times condition, invert.h, invert_batch.h and the design
  const Points points = drawn_points(static_cast<std::size_t>(::duskgrid::pricing::points()));
  std::vector<double> found(points.x.size());
  invert_normalised(points.x, points.beta, found);
  struct Worst {
    double error = 0, x = 0, s = 0;
  };
  std::map<std::string, Worst> worst;
  for (std::size_t i = 0; i < found.size(); ++i) {
    const double x = points.x[i], beta = points.beta[i];
    ASSERT_TRUE(std::isfinite(found[i]) && found[i] > 0) << x << ' ' << points.s[i];
    ASSERT_EQ(found[i], invert_normalised(x, beta)) << "scalar and batch differ at " << x;
    // From the vol found, not the one drawn: near the bound, rounding the price moves its vol far.
    const Wide exact = exact_total_vol(x, beta, found[i]);
    const WidePoint at = wide_price(x, exact);
    ASSERT_LT(static_cast<double>(abs(at.price / beta - 1)), 1e-25)
        << "oracle astray at " << x << ' ' << points.s[i];
    const double error =
        static_cast<double>(abs(found[i] / exact - 1)) / (kEps * condition(x, exact, at));
    EXPECT_LE(error, kPromised) << "x " << x << " s " << points.s[i] << " seed " << kSeed;
    Worst& so_far = worst[region(x, points.s[i])];
    if (error > so_far.error) so_far = {error, x, points.s[i]};
  }
  for (const auto& [where, w] : worst)
    std::cout << where << ": worst " << w.error << " ulp x condition at x " << w.x << ", s " << w.s
              << '\n';
  std::cout << found.size() << " points\n";
}

// The price of the vol found is the price asked, to the price's own error and that of the vol.
TEST(InvertNormalised, PriceOfTheVolIsThePriceAsked) {
  // 8 ulp of max(1, (x/s)^2) by the price (black.h), and 4 ulp times the condition by the vol,
  // which in the price weighs 1 / |dln s/dln b|.
  constexpr double kOfPrice = 8, kOfVol = 4;
  const Points points = drawn_points(static_cast<std::size_t>(::duskgrid::pricing::points()) / 4);
  for (std::size_t i = 0; i < points.x.size(); ++i) {
    const double x = points.x[i], beta = points.beta[i];
    const double s = invert_normalised(x, beta);
    const WidePoint at = wide_price(x, s);
    const double weight = static_cast<double>(s * at.vega / at.price);
    const double allowed =
        kOfPrice * std::max(1.0, (x / s) * (x / s)) + kOfVol * weight * condition(x, s, at);
    EXPECT_LE(std::abs(normalised_price(x, s) / beta - 1), kEps * allowed) << x << ' ' << s;
  }
}

TEST(NormalisedPrice, IsWithinAFewUlpTimesTheSquaredDeviations) {
  // The header promises the order of max(1, (x/s)^2) ulp: the exponent -(x/s)^2/2 alone has
  // that condition, and three terms of it meet (exponent, scaled tails, their difference).
  constexpr double kPromised = 8;
  std::mt19937_64 random(kSeed + 1);
  double worst = 0;
  for (int i = 0; i < points(); ++i) {
    const auto [x, s] = draw(random);
    const WidePoint exact = wide_price(x, s);
    if (exact.price < std::numeric_limits<double>::min()) continue;
    const double scale = std::max(1.0, (x / s) * (x / s));
    const double error =
        static_cast<double>(abs(normalised_price(x, s) / exact.price - 1)) / (kEps * scale);
    EXPECT_LE(error, kPromised) << "x " << x << " s " << s << " seed " << kSeed + 1;
    worst = std::max(worst, error);
  }
  std::cout << "worst error " << worst << " ulp x max(1, (x/s)^2)\n";
}

TEST(ScaledErfc, IsWithinFourUlpFromMinusOneUp) {
  constexpr double kPromised = 4;  // ulp, pricing/black.h
  std::mt19937_64 random(kSeed + 2);
  std::uniform_real_distribution<double> unit(0, 1);
  double worst = 0;
  for (int i = 0; i < points(); ++i) {
    const double x = i % 2 ? -1 + 6 * unit(random) : std::pow(10.0, -4 + 6 * unit(random));
    const Wide exact = exp(Wide(x) * x) * boost::math::erfc(Wide(x));
    const double error = static_cast<double>(abs(scaled_erfc(x) / exact - 1)) / kEps;
    EXPECT_LE(error, kPromised) << x;
    worst = std::max(worst, error);
  }
  std::cout << "worst error " << worst << " ulp\n";
}

// The whole way from a quoted price: logarithm, scale and inversion.
TEST(ImpliedVol, OutOfTheMoneyPriceIsWithinEightUlpTimesTheCondition) {
  // Four of the inversion, and four more for ln(F/K), the scale D sqrt(F K) and the root of time.
  constexpr double kPromised = 8;
  std::mt19937_64 random(kSeed + 3);
  std::uniform_real_distribution<double> unit(0, 1);
  double worst = 0;
  const int count = points() / 4;
  int done = 0;
  for (int tried = 0; tried < count; ++tried) {
    const double forward = std::pow(10.0, -2 + 8 * unit(random));
    const double t = std::pow(10.0, -3 + 4 * unit(random));
    const double vol = std::pow(10.0, -2 + 2.5 * unit(random));
    const double s = vol * std::sqrt(t);
    const double strike = forward * std::exp(std::min(8 * s * unit(random), 20.0));
    if (strike == forward) continue;
    const Wide x = log(Wide(forward) / strike);
    const Wide scale = sqrt(Wide(forward) * strike) * 0.97;
    const double price = static_cast<double>(scale * wide_price(x, s).price);
    const BlackTerms terms{quotes::PutCall::call, forward, strike, 0.97};
    const ImpliedVol found = implied_vol(terms, price, t);
    if (found.status == VolStatus::above_bound) continue;
    ASSERT_EQ(found.status, VolStatus::ok) << forward << ' ' << strike << ' ' << price;
    ++done;
    Wide exact = found.vol * sqrt(Wide(t));
    for (int i = 0; i < 8; ++i) {
      const WidePoint p = wide_price(x, exact);
      exact -= (p.price - price / scale) / p.vega;
    }
    ASSERT_LT(abs(wide_price(x, exact).price * scale / price - 1), Wide(1e-25));
    const double error = static_cast<double>(abs(found.vol * sqrt(Wide(t)) / exact - 1)) /
                         (kEps * condition(static_cast<double>(x), exact, wide_price(x, exact)));
    EXPECT_LE(error, kPromised) << forward << ' ' << strike << ' ' << vol << ' ' << t;
    worst = std::max(worst, error);
  }
  std::cout << "worst error " << worst << " ulp x condition over " << done << " prices\n";
  EXPECT_GT(done, count / 2);
}

}  // namespace
}  // namespace duskgrid::pricing
