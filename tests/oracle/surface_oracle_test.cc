// Slices and surfaces against independent routes: derivatives in 50 digits, the density by
// quadrature, and the conditions of absence of arbitrage by random search on dense grids.
#include <gtest/gtest.h>

#include <boost/math/quadrature/gauss_kronrod.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <cstdlib>
#include <random>

#include "surface/surface.h"

namespace duskgrid::surface {
namespace {

using Wide = boost::multiprecision::cpp_bin_float_50;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr unsigned kSeed = 20310620;

// DUSKGRID_ORACLE_POINTS asks for fewer where every instruction is slow (sanitizers); the
// surfaces are a twentieth of it.
int surfaces() {
  const char* asked = std::getenv("DUSKGRID_ORACLE_POINTS");
  const int count = asked ? std::atoi(asked) / 20 : 500;
  return std::max(count, 5);
}

Wide wide_w(const SliceParameters& s, const Wide& k) {
  const Wide u = s.psi * k + Wide(s.rho) * s.theta;
  const Wide breadth = Wide(s.theta) * s.theta * (1 - Wide(s.rho) * s.rho);
  return (s.theta + Wide(s.rho) * s.psi * k + sqrt(u * u + breadth)) / 2;
}

SliceParameters random_slice(std::mt19937_64& random) {
  std::uniform_real_distribution<double> unit(0, 1);
  const double theta = std::pow(10.0, -4 + 4 * unit(random)), rho = -0.99 + 1.98 * unit(random);
  const double most = std::min(4 / (1 + std::abs(rho)), std::sqrt(4 * theta / (1 + std::abs(rho))));
  return {theta, rho, most * unit(random)};
}

// A. Mingone, arXiv 2204.00312 (2022), written from the paper's recursion and not from the
// library's: every draw in its box is free of arbitrage.
std::vector<SliceParameters> random_surface(std::mt19937_64& random, std::size_t count) {
  std::uniform_real_distribution<double> unit(0, 1);
  std::vector<double> rho(count), p(count, 1), theta(count), f(count);
  for (std::size_t i = 0; i < count; ++i) {
    rho[i] = -0.95 + 1.9 * unit(random);
    const double growth = std::pow(10.0, -5 + 4 * unit(random));
    if (i == 0) {
      theta[i] = growth;
    } else {
      p[i] = std::max((1 + rho[i - 1]) / (1 + rho[i]), (1 - rho[i - 1]) / (1 - rho[i]));
      theta[i] = theta[i - 1] * p[i] + growth;
    }
    f[i] = std::min(4 / (1 + std::abs(rho[i])), std::sqrt(4 * theta[i] / (1 + std::abs(rho[i]))));
  }
  std::vector<SliceParameters> out;
  for (std::size_t i = 0; i < count; ++i) {
    const double low = i == 0 ? 0 : out[i - 1].psi * p[i];
    double high = i == 0 ? f[0] : std::min(f[i], out[i - 1].psi * theta[i] / theta[i - 1]);
    double growth = 1;
    for (std::size_t j = i + 1; j < count; ++j) high = std::min(high, f[j] / (growth *= p[j]));
    out.push_back({theta[i], rho[i], low + unit(random) * (high - low)});
  }
  return out;
}

Surface surface_of(const std::vector<SliceParameters>& slices) {
  Surface out{"RANDOM", {}, {}};
  double t = 0.1;
  for (const auto& s : slices) {
    out.slices.push_back({quotes::Instant{}, t, 100, 0.97, s, -0.5, 0.5});
    t *= 1.7;
  }
  return out;
}

TEST(SmileAt, DerivativesAgreeWithDifferencesInFiftyDigits) {
  std::mt19937_64 random(kSeed);
  std::uniform_real_distribution<double> unit(-1, 1);
  // Central differences with a step of 1e-15 of the bend: truncation 1e-30, rounding 1e-50 / 1e-30
  // = 1e-20.
  double worst = 0;
  for (int i = 0; i < 20 * surfaces(); ++i) {
    const SliceParameters s = random_slice(random);
    const double k = 8 * std::sqrt(s.theta) * unit(random);
    const Wide h = Wide(s.theta) / (s.psi + s.theta) * 1e-15;
    const Wide up = wide_w(s, k + h), at = wide_w(s, k), down = wide_w(s, k - h);
    const SmilePoint p = smile_at(s, k);
    // w and its slope are sums with cancellation where u and rho differ in sign; the scale
    // of the terms is what rounds. 1 - rho^2 loses 1/(1 - rho^2) ulp.
    const double loss = 8 * kEps / (1 - s.rho * s.rho);
    const double first = static_cast<double>((up - down) / (2 * h));
    const double second = static_cast<double>((up - 2 * at + down) / (h * h));
    const double scale = s.theta + std::abs(s.psi * k);
    EXPECT_NEAR(p.w, static_cast<double>(at), loss * scale) << i;
    EXPECT_NEAR(p.dw_dk, first, loss * s.psi) << i;
    EXPECT_NEAR(p.d2w_dk2, second,
                loss * std::abs(second) * (2 + 3 * std::abs(s.psi * k) / s.theta) + 1e-18)
        << i;
    worst = std::max(worst, std::abs(p.dw_dk - first) / (kEps * s.psi));
  }
  std::cout << "worst error of dw/dk " << worst << " ulp of psi\n";
}

// d- = -k/sqrt(w) - sqrt(w)/2; the density of ln(S/F) is g exp(-d-^2/2) / sqrt(2 pi w).
double density(const SliceParameters& s, double k) {
  const SmilePoint p = smile_at(s, k);
  const double d = -k / std::sqrt(p.w) - 0.5 * std::sqrt(p.w);
  return durrleman(p, k) * std::exp(-0.5 * d * d) / std::sqrt(2 * 3.14159265358979323846 * p.w);
}

TEST(Durrleman, DensityHasMassOneAndItsMeanIsTheForward) {
  // Adaptive quadrature asked for 1e-11. With both wing slopes short of the limit 2 the mass beyond
  // 60 deviations is below exp(-30).
  constexpr double kQuadrature = 1e-9;
  const SliceParameters slices[] = {
      {0.01, -0.5, 0.15}, {0.04, -0.7, 0.25}, {0.0008, 0.3, 0.03}, {0.25, -0.2, 0.6}, {0.04, 0, 0}};
  for (const SliceParameters& s : slices) {
    const double reach = 60 * std::sqrt(s.theta);
    double mass = 0, mean = 0;
    // Pieces of a deviation, since the density is narrow beside the reach.
    for (int i = -60; i < 60; ++i) {
      const double a = reach * i / 60, b = reach * (i + 1) / 60;
      using Rule = boost::math::quadrature::gauss_kronrod<double, 15>;
      mass += Rule::integrate([&](double k) { return density(s, k); }, a, b, 8, 1e-11);
      mean +=
          Rule::integrate([&](double k) { return std::exp(k) * density(s, k); }, a, b, 8, 1e-11);
    }
    EXPECT_NEAR(mass, 1, kQuadrature) << s.theta << ' ' << s.rho << ' ' << s.psi;
    EXPECT_NEAR(mean, 1, kQuadrature) << s.theta << ' ' << s.rho << ' ' << s.psi;
  }
}

// g of a sum of terms of order 1, and w differences relative to w: rounding only.
constexpr double kRounding = 1e-12;

TEST(RandomSurfaces, HaveNoButterflyAtOrBetweenOrOutsideTheirSlices) {
  std::mt19937_64 random(kSeed + 1);
  double least = 1;
  for (int i = 0; i < surfaces(); ++i) {
    const Surface s = surface_of(random_surface(random, 5));
    const double last = s.slices.back().year_fraction,
                 reach = 12 * std::sqrt(s.slices.back().backbone.theta);
    for (const double t : {0.03, 0.1, 0.13, 0.17, 0.2, 0.289, 0.4, 0.6, last, 2 * last}) {
      const TimedSmile smile(s, t);
      for (int j = -400; j <= 400; ++j) {
        const double k = reach * j * std::abs(j) / 160000.0;  // dense near the money
        const SurfacePoint p = smile.at(k);
        const double g = durrleman({p.w, p.dw_dk, p.d2w_dk2}, k);
        ASSERT_GE(g, -kRounding) << "surface " << i << " t " << t << " k " << k << " seed "
                                 << kSeed + 1;
        least = std::min(least, g);
      }
    }
  }
  std::cout << "least g " << least << " over " << surfaces() << " surfaces\n";
}

TEST(RandomSurfaces, TotalVarianceNeverFallsInTime) {
  std::mt19937_64 random(kSeed + 2);
  double least = 1;
  for (int i = 0; i < surfaces(); ++i) {
    const Surface s = surface_of(random_surface(random, 5));
    const double last = s.slices.back().year_fraction,
                 reach = 12 * std::sqrt(s.slices.back().backbone.theta);
    std::vector<TimedSmile> smiles;
    for (int m = 1; m <= 40; ++m) smiles.emplace_back(s, 1.2 * last * m / 40);
    for (const Slice& slice : s.slices) smiles.emplace_back(s, slice.year_fraction);
    std::sort(smiles.begin(), smiles.end(),
              [](const auto& a, const auto& b) { return a.year_fraction() < b.year_fraction(); });
    for (int j = -100; j <= 100; ++j) {
      const double k = reach * j * std::abs(j) / 10000.0;
      for (std::size_t m = 1; m < smiles.size(); ++m) {
        const double before = smiles[m - 1].at(k).w, after = smiles[m].at(k).w;
        ASSERT_GE(after, before * (1 - kRounding))
            << "surface " << i << " k " << k << " seed " << kSeed + 2;
        least = std::min(least, after / before - 1);
      }
    }
  }
  std::cout << "least relative growth of w " << least << '\n';
}

}  // namespace
}  // namespace duskgrid::surface
