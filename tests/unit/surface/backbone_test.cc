#include "surface/backbone.h"

#include <gtest/gtest.h>

#include <cmath>
#include <random>

#include "pricing/black.h"
#include "pricing/invert.h"
#include "surface/surface.h"

namespace duskgrid::surface {
namespace {

// A fit stops when its cost stops falling in the last digits, so parameters have about half
// the digits of a double, and volatilities a few more: absolute, decimals a year.
constexpr double kFittedVol = 1e-9;

FitSlice sampled(const SliceParameters& s, double t, int count = 21, double reach = 2.5) {
  FitSlice out{t, {}};
  for (int i = 0; i < count; ++i) {
    const double k = count == 1 ? 0 : reach * std::sqrt(s.theta) * (2.0 * i / (count - 1) - 1);
    out.quotes.push_back({k, std::sqrt(smile_at(s, k).w / t), 0.002});
  }
  return out;
}

double worst_miss(const BackboneFit& fit, std::span<const FitSlice> slices) {
  double worst = 0;
  for (std::size_t i = 0; i < slices.size(); ++i)
    for (const FitQuote& q : slices[i].quotes)
      worst = std::max(
          worst,
          std::abs(std::sqrt(smile_at(fit.slices[i], q.k).w / slices[i].year_fraction) - q.vol));
  return worst;
}

// The conditions of the header's papers: butterfly of each slice, and no crossing of neighbours.
void expect_free_of_arbitrage(std::span<const SliceParameters> slices) {
  constexpr double kRounding = 1e-12;  // of products of a few doubles, relative
  for (std::size_t i = 0; i < slices.size(); ++i) {
    const auto& s = slices[i];
    const double slope = s.psi * (1 + std::abs(s.rho));
    EXPECT_LT(slope, 4) << i;
    EXPECT_LE(s.psi * slope, 4 * s.theta * (1 + kRounding)) << i;
    if (i == 0) continue;
    const auto& p = slices[i - 1];
    EXPECT_GT(s.theta, p.theta) << i;
    EXPECT_GE(s.psi * (1 + s.rho), p.psi * (1 + p.rho) * (1 - kRounding)) << i;
    EXPECT_GE(s.psi * (1 - s.rho), p.psi * (1 - p.rho) * (1 - kRounding)) << i;
    EXPECT_LE(s.psi * p.theta, p.psi * s.theta * (1 + kRounding)) << i;  // phi does not grow
  }
}

TEST(SmileAt, MoneyHasThetaAndTheSkewOfRhoPsi) {
  const SliceParameters s{0.04, -0.6, 0.3};
  const SmilePoint p = smile_at(s, 0);
  EXPECT_DOUBLE_EQ(p.w, 0.04);
  EXPECT_DOUBLE_EQ(p.dw_dk, -0.18);
  EXPECT_DOUBLE_EQ(p.d2w_dk2, 0.5 * 0.09 * (1 - 0.36) / 0.04);
}

TEST(SmileAt, WingsRiseWithTheirLimitSlopes) {
  const SliceParameters s{0.04, -0.6, 0.3};
  // The distance to the limit falls as (theta/(psi k))^2: 2e-8 at |k| = 1000.
  constexpr double kLimit = 1e-7;
  EXPECT_NEAR(smile_at(s, 1000).dw_dk, 0.5 * 0.3 * 0.4, kLimit);
  EXPECT_NEAR(smile_at(s, -1000).dw_dk, -0.5 * 0.3 * 1.6, kLimit);
}

TEST(SmileAt, NoPsiIsFlat) {
  for (const double k : {-3.0, -0.1, 0.0, 2.0}) {
    const SmilePoint p = smile_at({0.09, 0.7, 0}, k);
    EXPECT_DOUBLE_EQ(p.w, 0.09);
    EXPECT_EQ(p.dw_dk, 0);
    EXPECT_EQ(p.d2w_dk2, 0);
  }
}

TEST(Durrleman, FlatSmileIsOne) { EXPECT_EQ(durrleman({0.04, 0, 0}, 0.3), 1.0); }

TEST(Durrleman, TermsAddUpAsInTheLemma) {
  // (1 - 0.5*0.2/0.08)^2 - 0.01 (25 + 0.25) + 0.15, by hand.
  EXPECT_NEAR(durrleman({0.04, 0.2, 0.3}, 0.5), 0.0625 - 0.2525 + 0.15, 1e-15);
}

TEST(FitBackbone, QuotesOfItsOwnFamilyComeBack) {
  const std::vector<SliceParameters> truth{
      {0.004, -0.5, 0.08}, {0.012, -0.55, 0.15}, {0.05, -0.6, 0.32}};
  const double times[] = {0.1, 0.3, 1.2};
  std::vector<FitSlice> slices;
  for (std::size_t i = 0; i < 3; ++i) slices.push_back(sampled(truth[i], times[i]));
  const auto fit = fit_backbone(slices, {});
  ASSERT_TRUE(fit.ok());
  EXPECT_EQ(fit->end, FitEnd::converged);
  ASSERT_EQ(fit->slices.size(), 3u);
  EXPECT_LT(worst_miss(*fit, slices), kFittedVol);
  expect_free_of_arbitrage(fit->slices);
}

TEST(FitBackbone, FlatChainPricedWithOneVolComesBackFlat) {
  constexpr double kVol = 0.23;
  std::vector<FitSlice> slices;
  Surface surface{"FLAT", {}, {}};
  const double times[] = {0.02, 0.1, 0.5, 1.0, 3.0};
  for (const double t : times) {
    FitSlice slice{t, {}};
    for (double k = -2; k <= 2.01; k += 0.25) {
      const double strike = 100 * std::exp(k * kVol * std::sqrt(t));
      const pricing::BlackTerms terms{strike >= 100 ? quotes::PutCall::call : quotes::PutCall::put,
                                      100, strike, 0.98};
      const auto vol =
          pricing::implied_vol(terms, pricing::black_price(terms, kVol * std::sqrt(t)), t);
      ASSERT_EQ(vol.status, pricing::VolStatus::ok);
      slice.quotes.push_back({std::log(strike / 100), vol.vol, 0.002});
    }
    slices.push_back(std::move(slice));
  }
  const auto fit = fit_backbone(slices, {});
  ASSERT_TRUE(fit.ok());
  for (std::size_t i = 0; i < slices.size(); ++i)
    surface.slices.push_back({quotes::Instant{}, times[i], 100, 0.98, fit->slices[i], -0.5, 0.5});
  for (const double t : {0.005, 0.02, 0.06, 0.3, 1.0, 2.2, 3.0, 6.0})
    for (const double k : {-1.0, -0.2, 0.0, 0.1, 0.7}) {
      EXPECT_NEAR(vol_at(surface, k, t), kVol, kFittedVol) << k << ' ' << t;
      EXPECT_NEAR(point_at(surface, k, t).w, kVol * kVol * t, 2 * kVol * t * kFittedVol)
          << k << ' ' << t;
    }
}

TEST(FitBackbone, OneQuoteGivesALevel) {
  const FitSlice slice{0.5, {{0.05, 0.3, 0.01}}};
  const auto fit = fit_backbone(std::span(&slice, 1), {});
  ASSERT_TRUE(fit.ok());
  // The level is free to meet the quote whatever shape the pulls choose: only the stop is inexact.
  EXPECT_NEAR(std::sqrt(smile_at(fit->slices[0], 0.05).w / 0.5), 0.3, 1e-5);
  EXPECT_NEAR(std::sqrt(smile_at(fit->slices[0], 0.0).w / 0.5), 0.3, 0.03);
}

TEST(FitBackbone, OneToFourQuotesAreMetAndBesideAFullSliceTakeItsShape) {
  const SliceParameters full{0.01, -0.6, 0.14}, later{0.022, -0.6, 0.22};
  for (int count = 1; count <= 4; ++count) {
    const std::vector<FitSlice> slices{sampled(full, 0.25), sampled(later, 0.5, count, 1.0)};
    const auto fit = fit_backbone(slices, {});
    ASSERT_TRUE(fit.ok()) << count;
    EXPECT_LT(worst_miss(*fit, slices), 1e-4) << count;  // a twentieth of the half-spread
    expect_free_of_arbitrage(fit->slices);
    // A deviation out, no quote of one to four reaches there: the neighbour's skew is.
    EXPECT_LT(smile_at(fit->slices[1], 0).dw_dk, 0) << count;
  }
}

TEST(FitBackbone, OneSidedChainOfPutsIsMet) {
  const SliceParameters truth{0.01, -0.4, 0.15};
  FitSlice slice{0.25, {}};
  for (int i = 1; i <= 12; ++i) {
    const double k = -0.025 * i;
    slice.quotes.push_back({k, std::sqrt(smile_at(truth, k).w / 0.25), 0.003});
  }
  const auto fit = fit_backbone(std::span(&slice, 1), {});
  ASSERT_TRUE(fit.ok());
  EXPECT_LT(worst_miss(*fit, std::span(&slice, 1)), kFittedVol);
  expect_free_of_arbitrage(fit->slices);
}

TEST(FitBackbone, StrayQuoteMovesTheOthersByLessThanAHalfSpread) {
  const SliceParameters truth{0.01, -0.5, 0.15};
  FitSlice slice = sampled(truth, 0.25);
  slice.quotes[7].vol += 0.10;  // fifty half-spreads
  const auto fit = fit_backbone(std::span(&slice, 1), {});
  ASSERT_TRUE(fit.ok());
  for (std::size_t i = 0; i < slice.quotes.size(); ++i)
    if (i != 7) {
      EXPECT_NEAR(std::sqrt(smile_at(fit->slices[0], slice.quotes[i].k).w / 0.25),
                  slice.quotes[i].vol, 0.002)
          << i;
    }
}

// Later total variance below earlier: no surface meets it, and the answer still must be free.
TEST(FitBackbone, InvertedTermStructureEndsFreeOfArbitrageBetweenTheTwo) {
  const std::vector<FitSlice> slices{sampled({0.04, -0.3, 0.2}, 0.5),
                                     sampled({0.03, -0.3, 0.2}, 0.6)};
  const auto fit = fit_backbone(slices, {});
  ASSERT_TRUE(fit.ok());
  expect_free_of_arbitrage(fit->slices);
  EXPECT_GE(fit->slices[1].theta, 0.03 * 0.9);
  EXPECT_LE(fit->slices[0].theta, 0.04 * 1.1);
}

TEST(FitBackbone, NoisyQuotesEndFreeOfArbitrageAndNearThem) {
  std::mt19937 random(7);
  std::normal_distribution<double> noise(0, 0.004);
  for (int round = 0; round < 20; ++round) {
    std::vector<FitSlice> slices;
    for (const double t : {0.05, 0.15, 0.4, 1.0, 2.0}) {
      slices.push_back(sampled({0.05 * t, -0.5, 0.45 * std::pow(t, 0.6) * 0.5}, t));
      for (FitQuote& q : slices.back().quotes) q.vol += noise(random);
    }
    const auto fit = fit_backbone(slices, {});
    ASSERT_TRUE(fit.ok());
    expect_free_of_arbitrage(fit->slices);
    EXPECT_LT(worst_miss(*fit, slices), 6 * 0.004) << round;  // six deviations of the noise
  }
}

TEST(FitBackbone, SameQuotesGiveTheSameBits) {
  const std::vector<FitSlice> slices{sampled({0.01, -0.5, 0.15}, 0.25),
                                     sampled({0.03, -0.4, 0.2}, 0.7)};
  const auto a = fit_backbone(slices, {}), b = fit_backbone(slices, {});
  for (std::size_t i = 0; i < 2; ++i) {
    EXPECT_EQ(a->slices[i].theta, b->slices[i].theta);
    EXPECT_EQ(a->slices[i].rho, b->slices[i].rho);
    EXPECT_EQ(a->slices[i].psi, b->slices[i].psi);
  }
}

TEST(FitBackbone, NothingToFitIsNotEnoughData) {
  const auto none = fit_backbone({}, {});
  ASSERT_FALSE(none.ok());
  EXPECT_EQ(none.failure().fault, Fault::not_enough_data);
  const FitSlice empty{0.5, {}};
  EXPECT_EQ(fit_backbone(std::span(&empty, 1), {}).failure().fault, Fault::not_enough_data);
}

TEST(FitBackbone, BadOptionIsRefusedByName) {
  const FitSlice slice = sampled({0.01, 0, 0.1}, 0.25);
  const auto fit = fit_backbone(std::span(&slice, 1), {.huber_half_spreads = 0});
  ASSERT_FALSE(fit.ok());
  EXPECT_EQ(fit.failure().fault, Fault::configuration);
  EXPECT_NE(fit.failure().detail.find("huber_half_spreads = 0"), std::string::npos);
  EXPECT_TRUE(BackboneOptions{.least_half_spread = -1}.problem());
  EXPECT_TRUE(BackboneOptions{.most_iterations = 0}.problem());
}

}  // namespace
}  // namespace duskgrid::surface
