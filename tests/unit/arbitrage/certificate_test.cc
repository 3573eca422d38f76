#include "arbitrage/certificate.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <array>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <boost/multiprecision/cpp_int.hpp>
#include <cmath>
#include <functional>
#include <limits>
#include <random>

#include "arbitrage/enclosure.h"
#include "arbitrage/surface_checks.h"

namespace duskgrid::arbitrage {
namespace {

using surface::Between;
using surface::Overlay;
using surface::Slice;
using surface::SliceParameters;
using surface::Surface;
using Random = std::mt19937_64;

constexpr double kInfinity = std::numeric_limits<double>::infinity();
constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

double uniform(Random& random, double low, double high) {
  return std::uniform_real_distribution<double>(low, high)(random);
}

double log_uniform(Random& random, double low, double high) {
  return std::exp(uniform(random, std::log(low), std::log(high)));
}

Slice slice_at(double t, const SliceParameters& parameters) {
  const auto seconds = std::chrono::seconds{static_cast<std::int64_t>(t * 31536000)};
  return {quotes::Instant{} + seconds, t, 100, 0.98, parameters, -0.3, 0.3};
}

double largest_psi(double theta, double rho) {
  const double slope = 1 + std::abs(rho);
  return std::min(4 / slope, std::sqrt(4 * theta / slope));
}

// B1, B2, C1 and C2 hold with some room: docs/methods.md 5.1.
Surface random_backbones(Random& random, int slices) {
  for (;;) {
    Surface s{"KELPWK", {}, {}};
    double t = uniform(random, 0.02, 0.3);
    SliceParameters p{0.05 * t, uniform(random, -0.8, 0.3), 0};
    p.psi = uniform(random, 0.1, 0.6) * largest_psi(p.theta, p.rho);
    s.slices.push_back(slice_at(t, p));
    bool room = true;
    while (room && s.slices.size() < static_cast<std::size_t>(slices)) {
      const SliceParameters before = p;
      const double growth = uniform(random, 1.2, 1.8);
      t *= growth;
      p.rho += uniform(random, -0.03, 0.03);
      const double least = std::max((1 + before.rho) / (1 + p.rho), (1 - before.rho) / (1 - p.rho));
      p.theta = before.theta * std::max(growth, 1.05 * least);
      const double low = before.psi * least;
      const double high =
          std::min(before.psi * p.theta / before.theta, largest_psi(p.theta, p.rho));
      room = low < high;
      p.psi = std::lerp(low, high, uniform(random, 0.1, 0.7));
      s.slices.push_back(slice_at(t, p));
    }
    if (room) return s;
  }
}

// A slow wave over 24 knots from -6 to 4 deviations, `size` of the variance at the money, that ends
// wherever it is.
Overlay gentle_overlay(Random& random, const SliceParameters& p, double size) {
  constexpr int kKnots = 24;
  const double deviation = std::sqrt(p.theta), phase = uniform(random, 0, 6);
  Overlay out;
  for (int i = 0; i < kKnots; ++i)
    out.knots.push_back(deviation * (-6 + 10.0 * i / (kKnots - 1) + uniform(random, -0.1, 0.1)));
  for (int i = 0; i < kKnots - 2; ++i)
    out.coefficients.push_back(size * p.theta * std::sin(0.35 * i + phase));
  return out;
}

Surface random_surface(Random& random, int slices, double size) {
  Surface s = random_backbones(random, slices);
  for (Slice& slice : s.slices) slice.overlay = gentle_overlay(random, slice.backbone, size);
  return s;
}

double durrleman_at(const Slice& slice, double k) {
  return surface::durrleman(surface::smile_of(slice, k), k);
}

// At a time of the surface.
double durrleman_at(const surface::TimedSmile& smile, double k) {
  const auto p = smile.at(k);
  return surface::durrleman({p.w, p.dw_dk, p.d2w_dk2}, k);
}

// Of 4 W^2 g with W >= w in place of w, the lesser of half the second and the first derivative in
// W, at w: where both are not negative, nor g, variance may be added.
double growth_at(const Slice& slice, double k) {
  const auto [w, slope, bend] = surface::smile_of(slice, k);
  const double rise = 4 - 0.25 * slope * slope + 2 * bend;
  return std::min(rise, 2 * w * rise - 4 * k * slope - slope * slope);
}

const Finding* found(const Certificate& c, Proof proof, std::size_t slice) {
  for (const Finding& f : c.findings)
    if (f.proof == proof && f.slice == slice) return &f;
  return nullptr;
}

std::string list(const Certificate& c) {
  std::string out;
  for (const Finding& f : c.findings)
    out += std::string(word(f.proof)) + " " + std::to_string(f.slice) + " at " +
           std::to_string(f.k) + " value " + std::to_string(f.value) +
           (f.broken ? " broken; " : " open; ");
  return out;
}

// ---- What is free is certified ----

TEST(Certify, RandomBackbonesAreCertified) {
  Random random(1);
  for (int trial = 0; trial < 200; ++trial) {
    const auto c = certify(random_backbones(random, 6));
    EXPECT_TRUE(c.certified) << trial << ' ' << list(c);
  }
}

TEST(Certify, RandomBackbonesWithGentleOverlaysAreCertified) {
  Random random(2);
  std::int64_t most = 0;
  for (int trial = 0; trial < 200; ++trial) {
    const auto c = certify(random_surface(random, 6, 0.002));
    EXPECT_TRUE(c.certified) << trial << ' ' << list(c);
    most = std::max(most, c.boxes);
  }
  // Some 20 to 40 ranges between knots, for three statements a slice, looked at once or a few
  // times.
  EXPECT_LT(most, 6 * 1000);
}

TEST(Certify, SameSurfaceHasTheSameCertificate) {
  Random random(3);
  const Surface s = random_surface(random, 4, 0.02);
  const auto a = certify(s), b = certify(s);
  EXPECT_EQ(a.boxes, b.boxes);
  ASSERT_EQ(a.findings.size(), b.findings.size());
  for (std::size_t i = 0; i < a.findings.size(); ++i) EXPECT_EQ(a.findings[i].k, b.findings[i].k);
}

TEST(Certify, FlatSlicesAreCertified) {
  Surface s{"FLAT", {}, {slice_at(0.5, {0.02, 0, 0}), slice_at(1, {0.02, 0.1, 0})}};
  EXPECT_TRUE(certify(s).certified);
  s.slices.push_back(slice_at(2, {0.08, -0.3, 0.1}));
  const auto c = certify(s);
  // A flat slice before one that is not: psi / theta rises, but w does not fall.
  EXPECT_TRUE(c.certified) << list(c);
}

TEST(Certify, LevelsFromTinyToHugeAreCertified) {
  Random random(4);
  for (int trial = 0; trial < 300; ++trial) {
    const double theta = log_uniform(random, 1e-10, 100), rho = uniform(random, -0.95, 0.95);
    SliceParameters p{theta, rho, uniform(random, 0, 0.7) * largest_psi(theta, rho)};
    Surface s{"SPAN", {}, {slice_at(0.5, p)}};
    p.psi *= 1.02, p.theta *= 1.1;
    s.slices.push_back(slice_at(1, p));
    for (Slice& slice : s.slices) {
      const double deviation = std::min(std::sqrt(theta), 1.0);
      for (int i = 0; i < 12; ++i) slice.overlay.knots.push_back(deviation * (i - 6));
      slice.overlay.coefficients.assign(10, 1e-4 * theta);
    }
    const auto c = certify(s);
    EXPECT_TRUE(c.certified) << trial << " theta " << theta << ' ' << list(c);
  }
}

// ---- The boundary of the backbone's conditions ----

// The slopes psi (1 + rho) of the wings agree to the last bit, or differ by the last one.
TEST(Certify, WingsAsSteepAsTheNextAreCertifiedAndSteeperOnesRefused) {
  const SliceParameters first{0.04, -0.5, 0.2};
  Surface s{"EDGE", {}, {slice_at(0.5, first), slice_at(1, {0.05, -0.5, 0.2})}};
  EXPECT_TRUE(certify(s).certified);
  s.slices[1].backbone.psi = std::nextafter(0.2, 0);
  const auto c = certify(s);
  EXPECT_FALSE(c.certified);
  const Finding* f = found(c, Proof::calendar, 0);
  ASSERT_NE(f, nullptr);
  EXPECT_TRUE(f->broken);
  EXPECT_EQ(std::abs(f->k), kInfinity);
}

// Doubled theta and psi: psi / theta agrees to the last bit.
TEST(Certify, EqualCurvatureIsCertified) {
  Random random(5);
  for (int trial = 0; trial < 100; ++trial) {
    SliceParameters p{log_uniform(random, 0.001, 0.5), uniform(random, -0.9, 0.9), 0};
    p.psi = 0.5 * largest_psi(2 * p.theta, p.rho) * uniform(random, 0.1, 0.99);
    const Surface s{"EDGE", {}, {slice_at(0.5, p), slice_at(1, {2 * p.theta, p.rho, 2 * p.psi})}};
    const auto c = certify(s);
    EXPECT_TRUE(c.certified) << list(c);
  }
}

// B2, psi^2 (1 + |rho|) <= 4 theta, at its bound and one unit to either side, against rationals.
// Where it holds no range is looked at.
TEST(Certify, ConditionsOnBackbonesAreDecidedExactly) {
  using Rational = boost::multiprecision::cpp_rational;
  Random random(21);
  int met = 0, missed = 0;
  for (int trial = 0; trial < 600; ++trial) {
    SliceParameters p{0, uniform(random, -0.9, 0.9), uniform(random, 0.01, 1)};
    p.theta = 0.25 * (p.psi * p.psi * (1 + std::abs(p.rho)));
    if (trial % 3) p.theta = std::nextafter(p.theta, trial % 3 == 1 ? 0 : 1);
    const Rational psi = p.psi, rho = std::abs(p.rho), theta = p.theta;
    const bool holds = psi * psi * (1 + rho) <= 4 * theta;
    const auto c = certify({"EDGE", {}, {slice_at(1, p)}});
    EXPECT_EQ(c.boxes == 0, holds) << trial;
    (holds ? met : missed) += 1;
  }
  EXPECT_GT(met, 100);
  EXPECT_GT(missed, 100);
}

TEST(Certify, CalendarArbitrageOfTheTailsAloneIsFound) {
  Random random(6);
  for (int trial = 0; trial < 200; ++trial) {
    Surface s = random_surface(random, 2, 0.001);
    auto& a = s.slices[0].backbone;
    auto& b = s.slices[1].backbone;
    const double sign = trial % 2 ? 1 : -1;
    // Smaller slope in one wing, higher at the money: they cross far out.
    b.psi = a.psi * (1 + sign * a.rho) / (1 + sign * b.rho) * (1 - log_uniform(random, 1e-12, 0.1));
    const auto c = certify(s);
    const Finding* f = found(c, Proof::calendar, 0);
    ASSERT_NE(f, nullptr) << trial;
    EXPECT_TRUE(f->broken);
    ASSERT_EQ(std::abs(f->k), kInfinity);
    const long double wing = f->k > 0 ? 1 : -1;
    EXPECT_LT(b.psi * (1 + wing * b.rho), a.psi * (1 + wing * a.rho));
    EXPECT_LE(f->value, 0);
  }
}

TEST(Certify, FlatSlicesThatFallAreRefused) {
  const auto c = certify({"FALL", {}, {slice_at(0.5, {0.02, 0, 0}), slice_at(1, {0.019, 0, 0})}});
  const Finding* f = found(c, Proof::calendar, 0);
  ASSERT_NE(f, nullptr);
  EXPECT_TRUE(f->broken);
  constexpr double kRounding = 4 * 0.02 * std::numeric_limits<double>::epsilon();
  EXPECT_NEAR(f->value, -0.001, kRounding);
}

// C1 alone does not order two slices: whether they cross is for the ranges to say.
TEST(Certify, SlicesWhoseCurvatureRisesAreRefusedExactlyWhenPointsSayTheyCross) {
  Random random(20);
  int crossing = 0, ordered = 0;
  for (int trial = 0; trial < 2000; ++trial) {
    const SliceParameters a{0.04, uniform(random, -0.8, 0.8), uniform(random, 0.01, 0.15)};
    const SliceParameters b{0.04 * uniform(random, 1, 1.5), uniform(random, -0.8, 0.8),
                            uniform(random, 0.05, 0.25)};
    if (b.psi * (1 + b.rho) <= a.psi * (1 + a.rho) || b.psi * (1 - b.rho) <= a.psi * (1 - a.rho) ||
        b.psi / b.theta <= a.psi / a.theta)
      continue;
    double least = kInfinity;
    for (int i = -2000; i <= 2000; ++i) {
      const double k = 0.2 * std::sinh(5e-3 * i);
      least = std::min(least, surface::smile_at(b, k).w - surface::smile_at(a, k).w);
    }
    const auto c = certify({"CURL", {}, {slice_at(0.5, a), slice_at(1, b)}});
    const Finding* f = found(c, Proof::calendar, 0);
    constexpr double kBetweenPoints = 1e-6;  // (w'' / 2) (step of k / 2)^2, near the money
    if (least < 0) {
      ASSERT_NE(f, nullptr) << trial;
      EXPECT_TRUE(f->broken);
      EXPECT_LT(surface::smile_at(b, f->k).w, surface::smile_at(a, f->k).w);
      ++crossing;
    } else if (least > kBetweenPoints) {
      EXPECT_EQ(f, nullptr) << trial << ' ' << list(c);
      ++ordered;
    }
  }
  EXPECT_GT(crossing, 50);
  EXPECT_GT(ordered, 50);
}

// psi (1 + |rho|) = 4.2: R. Lee, Mathematical Finance 14 (2004) 469-480.
TEST(Certify, WingsPastTheMomentBoundAreRefused) {
  const auto c = certify({"STEEP", {}, {slice_at(1, {4, -0.5, 2.8})}});
  const Finding* f = found(c, Proof::butterfly, 0);
  ASSERT_NE(f, nullptr);
  EXPECT_TRUE(f->broken);
  EXPECT_EQ(f->k, -kInfinity);
  EXPECT_LT(f->value, 0);
}

// ---- Without the theorems ----

TEST(CertifySmile, BackbonesThatMeetTheConditionsAreCertifiedWithoutThem) {
  Random random(7);
  for (int trial = 0; trial < 500; ++trial) {
    const double theta = log_uniform(random, 1e-6, 2), rho = uniform(random, -0.95, 0.95);
    const SliceParameters p{theta, rho, uniform(random, 0.01, 0.98) * largest_psi(theta, rho)};
    // And with any constant added: theorem 4.3 of Gatheral & Jacquier 2014.
    for (const double shift : {0.0, log_uniform(random, 0.001, 100) * theta}) {
      const auto c = certify_smile(Hyperbola::of(p).raised(shift), {});
      EXPECT_TRUE(c.certified) << trial << ' ' << list(c);
    }
  }
}

TEST(CertifySmile, OtherBackbonesAreRefusedExactlyWhenPointsSayNo) {
  Random random(8);
  int refused = 0, certified = 0;
  for (int trial = 0; trial < 500; ++trial) {
    const double theta = log_uniform(random, 1e-4, 0.5), rho = uniform(random, -0.9, 0.9);
    const double psi =
        std::min(uniform(random, 1, 3) * largest_psi(theta, rho), 3.9 / (1 + std::abs(rho)));
    const Slice slice = slice_at(1, {theta, rho, psi});
    double least = kInfinity;
    for (int i = -4000; i <= 4000; ++i)
      least = std::min(least, durrleman_at(slice, std::sinh(2e-3 * i) * std::sqrt(theta)));
    const auto c = certify_smile(Hyperbola::of(slice.backbone), {});
    constexpr double kBetweenPoints = 1e-3;  // what g may fall between points 2e-3 deviations apart
    if (least < 0) {
      EXPECT_FALSE(c.certified) << trial;
    }
    if (least > kBetweenPoints) {
      EXPECT_TRUE(c.certified) << trial << ' ' << list(c);
    }
    refused += !c.certified, certified += c.certified;
    if (!c.findings.empty() && c.findings[0].broken) {
      EXPECT_LT(durrleman_at(slice, c.findings[0].k), 1e-12) << trial;
    }
  }
  EXPECT_GT(refused, 50);
  EXPECT_GT(certified, 50);
}

// J. Gatheral, A. Jacquier, Quantitative Finance 14 (2014) 59-71, example 3.1 (A. Vogt's slice) and
// the repairs of example 5.1, to the digits printed there. g < 0 on (0.6425, 1.2570), least
// -0.032864 at 0.8795: recomputed.
TEST(CertifySmile, VogtSliceIsRefusedWhereItsDensityIsNegative) {
  const auto c =
      certify_smile(Hyperbola::of(RawSlice{-0.0410, 0.1331, 0.3060, 0.3586, 0.4153}), {});
  ASSERT_EQ(c.findings.size(), 1u);
  EXPECT_EQ(c.findings[0].proof, Proof::butterfly);
  EXPECT_TRUE(c.findings[0].broken);
  // The search stops within 1 % of the least 4 w^2 g, which is least near the least g.
  EXPECT_NEAR(c.findings[0].k, 0.8795, 0.15);
  EXPECT_NEAR(c.findings[0].value, -0.032864, 0.006);
}

TEST(CertifySmile, PrintedRepairsOfTheVogtSliceAreCertified) {
  for (const RawSlice& s : {RawSlice{0.0077409, 0.0692420, -0.3340365, 0.0420338, 0.1186080},
                            RawSlice{-0.0305199, 0.1027168, 0.1007176, 0.2723442, 0.4123981}}) {
    const auto c = certify_smile(Hyperbola::of(s), {});
    EXPECT_TRUE(c.certified) << list(c);
  }
}

// A negative b would be squared away.
TEST(CertifySmile, NegativeSlopesAreNotTakenForPositiveOnes) {
  EXPECT_TRUE(certify_smile(Hyperbola::of(RawSlice{0.04, 0.1, 0, 0, 0.3}), {}).certified);
  EXPECT_FALSE(certify_smile(Hyperbola::of(RawSlice{0.04, -0.1, 0, 0, 0.3}), {}).certified);
  EXPECT_FALSE(certify_smile(Hyperbola::of(RawSlice{0.04, kNaN, 0, 0, 0.3}), {}).certified);
}

TEST(CertifySmile, NegativeVarianceIsNotPositive) {
  const auto c = certify_smile(Hyperbola::of(RawSlice{-0.1, 0.1, 0, 0, 0.5}), {});
  ASSERT_EQ(c.findings.size(), 1u);
  EXPECT_EQ(c.findings[0].proof, Proof::positive);
  EXPECT_TRUE(c.findings[0].broken);
}

// ---- Planted violations ----

// One B-spline from `start`, `width` wide, that ends with zero on either side.
Overlay bump(double start, double width, double size) {
  Overlay out;
  for (int i = 0; i < 6; ++i) out.knots.push_back(start + 0.25 * width * i);
  out.coefficients = {0, size, 0, 0};
  return out;
}

// Least of f over points of the bump, its knots among them, where g has its kinks.
double least_over(const Overlay& overlay, const std::function<double(double)>& f) {
  constexpr int kPoints = 100;
  double least = kInfinity;
  for (std::size_t i = 0; i + 1 < overlay.knots.size(); ++i)
    for (int j = 0; j < kPoints; ++j)
      least = std::min(least, f(std::lerp(overlay.knots[i], overlay.knots[i + 1], j / 100.0)));
  return least;
}

// The size at which least(size) passes zero; least(0) > 0 > least(size) for a large size.
double critical_size(double first, const std::function<double(double)>& least) {
  double low = 0, high = first;
  while (!(least(high) < 0)) high *= 2;
  for (int i = 0; i < 60; ++i) {
    const double middle = 0.5 * (low + high);
    (least(middle) < 0 ? high : low) = middle;
  }
  return 0.5 * (low + high);
}

// 100 points between knots see the least to 1e-4 of what g changes by over the bump; the sizes are
// farther than that from the critical one.
constexpr double kOver = 1 + 1e-3, kUnder = 1 - 1e-3;

TEST(Certify, NarrowBumpsThatBreakTheButterflyAreAllFoundAndSmallerOnesCertified) {
  Random random(9);
  int certified = 0;
  for (int trial = 0; trial < 200; ++trial) {
    Surface s = random_backbones(random, 3);
    // One in four has wings so steep that the term in w'^2 / 16 matters.
    if (trial % 4 == 3) s.slices = {slice_at(1, {2, uniform(random, -0.4, 0.4), 2.2})};
    const auto which = static_cast<std::size_t>(trial) % s.slices.size();
    Slice& slice = s.slices[which];
    const double deviation = std::sqrt(slice.backbone.theta);
    const double width = log_uniform(random, 1e-6, 0.03 * deviation);
    const double start = deviation * uniform(random, -4, 3), sign = trial % 2 ? 1 : -1;
    const auto least = [&](double size) {
      slice.overlay = bump(start, width, sign * size);
      return least_over(slice.overlay, [&](double k) { return durrleman_at(slice, k); });
    };
    const double size = critical_size(1e-3 * width * width, least);
    slice.overlay = bump(start, width, sign * size * kOver);
    const auto broken = certify(s);
    EXPECT_FALSE(broken.certified);
    const Finding* f = found(broken, Proof::butterfly, which);
    ASSERT_NE(f, nullptr) << trial << " width " << width;
    EXPECT_TRUE(f->broken) << trial << " width " << width;
    EXPECT_GE(f->k, start);
    EXPECT_LE(f->k, start + width);
    EXPECT_LT(f->value, 0);
    EXPECT_LT(durrleman_at(slice, f->k), 0);

    slice.overlay = bump(start, width, sign * size * kUnder);
    const auto free = certify(with_proved_rules(s));
    certified += free.certified;
    // So close to the edge variance cannot be added where k w' < 0.
    const auto growth = [&](double k) { return growth_at(slice, k); };
    if (which + 1 == s.slices.size() && least_over(slice.overlay, growth) < 0) {
      EXPECT_EQ(free.findings.size(), 1u) << trial << ' ' << list(free);
      EXPECT_NE(found(free, Proof::after, which), nullptr);
      continue;
    }
    EXPECT_TRUE(free.certified) << trial << " width " << width << ' ' << list(free);
  }
  EXPECT_GT(certified, 150);
}

TEST(Certify, BumpsThatBreakTheCalendarAreAllFoundAndSmallerOnesAreNot) {
  Random random(10);
  for (int trial = 0; trial < 200; ++trial) {
    Surface s = random_backbones(random, 3);
    const auto which = static_cast<std::size_t>(trial / 2) % 2;
    Slice &early = s.slices[which], &late = s.slices[which + 1];
    Slice& slice = trial % 2 ? late : early;
    const double deviation = std::sqrt(early.backbone.theta);
    const double width = log_uniform(random, 1e-6, deviation);
    const double start = deviation * uniform(random, -4, 3), sign = trial % 2 ? -1 : 1;
    const auto step = [&](double k) {
      return surface::smile_of(late, k).w - surface::smile_of(early, k).w;
    };
    const auto least = [&](double size) {
      slice.overlay = bump(start, width, sign * size);
      return least_over(slice.overlay, step);
    };
    const double size = critical_size(1e-4 * early.backbone.theta, least);
    slice.overlay = bump(start, width, sign * size * kOver);
    const auto broken = certify(s);
    const Finding* f = found(broken, Proof::calendar, which);
    ASSERT_NE(f, nullptr) << trial << " width " << width;
    EXPECT_TRUE(f->broken);
    EXPECT_GE(f->k, start);
    EXPECT_LE(f->k, start + width);
    EXPECT_LT(step(f->k), 0);

    slice.overlay = bump(start, width, sign * size * kUnder);
    EXPECT_EQ(found(certify(s), Proof::calendar, which), nullptr) << trial << " width " << width;
  }
}

TEST(Certify, OverlayBelowZeroTotalVarianceIsNotPositive) {
  Surface s{"SUNK", {}, {slice_at(1, {0.04, -0.3, 0.1})}};
  s.slices[0].overlay = bump(-0.05, 0.1, -1);
  const auto c = certify(s);
  const Finding* f = found(c, Proof::positive, 0);
  ASSERT_NE(f, nullptr) << list(c);
  EXPECT_TRUE(f->broken);
}

// ---- Ends of overlays ----

// The same constant everywhere; the knots are near the money.
Overlay constant(double value) {
  return {{-0.02, -0.01, 0, 0.01, 0.02, 0.03}, std::vector<double>(4, value)};
}

// From `left` to `right` within the knots, 0.6 wide from `start`.
Overlay ramp(double start, double left, double right) {
  Overlay out;
  for (int i = 0; i < 7; ++i) out.knots.push_back(start + 0.1 * i);
  for (int i = 0; i < 5; ++i) out.coefficients.push_back(std::lerp(left, right, i / 4.0));
  return out;
}

using Exact = boost::multiprecision::cpp_bin_float_50;

// Off the knots, of the slice's backbone with a constant.
Exact exact_w(const Slice& slice, double k) {
  const SliceParameters& p = slice.backbone;
  const Exact theta = p.theta, rho = p.rho, z = p.psi * Exact(k) + rho * theta;
  const Exact root = sqrt(z * z + theta * theta * (1 - rho * rho));
  return (theta + rho * p.psi * k + root) / 2 + surface::overlay_at(slice.overlay, k).u;
}

// B1 and B2 do not bear a negative constant: its tails are looked at.
TEST(Certify, NegativeEndsAreRefusedExactlyWhenPointsOfTheTailsSayNo) {
  Random random(25);
  int refused = 0, certified = 0;
  for (int trial = 0; trial < 400; ++trial) {
    const double theta = log_uniform(random, 0.01, 0.5);
    const double rho = (trial % 2 ? 1 : -1) * uniform(random, 0.3, 0.9);
    Slice slice = slice_at(1, {theta, rho, uniform(random, 0.9, 0.999) * largest_psi(theta, rho)});
    const double end = -theta * (1 - rho * rho) * uniform(random, 0.6, 0.999);
    if (trial % 3 == 0) slice.overlay = constant(end);
    if (trial % 3 == 1) slice.overlay = ramp(-0.3, end, 0);
    if (trial % 3 == 2) slice.overlay = ramp(-0.3, 0, end);
    double least = kInfinity;
    const double low = slice.overlay.knots.front(), high = slice.overlay.knots.back();
    for (int i = -8000; i <= 8000; ++i) {
      const double k = 0.1 * std::sinh(1e-3 * i);
      if (k <= low || k >= high) least = std::min(least, durrleman_at(slice, k));
    }
    const auto c = certify({"TAIL", {}, {slice}});
    const Finding* f = found(c, Proof::butterfly, 0);
    // Between points 0.1 % apart g differs by the square of that.
    if (least < 0) {
      ASSERT_NE(f, nullptr) << trial << " least " << least;
      EXPECT_TRUE(f->broken) << trial;
      EXPECT_LT(durrleman_at(slice, f->k), 0) << trial;
      ++refused;
    } else if (trial % 3 == 0 && least > 1e-5) {
      EXPECT_EQ(f, nullptr) << trial << ' ' << list(c);
      ++certified;
    }
  }
  EXPECT_GT(refused, 30);
  EXPECT_GT(certified, 20);
}

// Two slices all but parallel in a wing, where the later one is above by (1 + rho) / 2 of what
// theta grows by: more than that at the end of the earlier overlay is arbitrage far out, less is
// none.
TEST(Certify, EndsInTheWrongOrderAreFoundFarOutAndEndsInOrderAreNot) {
  Random random(26);
  for (int trial = 0; trial < 400; ++trial) {
    const SliceParameters a{log_uniform(random, 0.01, 0.2), uniform(random, -0.6, 0.6), 0.1};
    // As steep as the other, or hardly steeper.
    const double steeper = trial % 4 == 0 ? 0 : log_uniform(random, 1e-12, 1e-9);
    Surface s{
        "ENDS", {}, {slice_at(0.5, a), slice_at(1, {1.3 * a.theta, a.rho, a.psi * (1 + steeper)})}};
    const bool left = trial % 2;
    const double room = 0.15 * a.theta * (left ? 1 - a.rho : 1 + a.rho);
    const double margin = log_uniform(random, 0.01, 0.3);
    const auto with_end = [&](double end) {
      s.slices[0].overlay = left ? ramp(-0.3, end, 0) : ramp(-0.3, 0, end);
      return certify(s);
    };
    const auto broken = with_end(room * (1 + margin));
    const Finding* f = found(broken, Proof::calendar, 0);
    ASSERT_NE(f, nullptr) << trial;
    EXPECT_TRUE(f->broken) << trial << ' ' << list(broken);
    ASSERT_TRUE(std::isfinite(f->k));
    EXPECT_TRUE(left ? f->k < -0.3 : f->k > 0.3) << f->k;
    EXPECT_LT(exact_w(s.slices[1], f->k), exact_w(s.slices[0], f->k)) << trial;

    const auto ordered = with_end(room * (1 - margin));
    EXPECT_EQ(found(ordered, Proof::calendar, 0), nullptr) << trial << ' ' << list(ordered);
    // The later slice with as much at that end.
    s.slices[1].overlay = left ? ramp(-0.3, room, 0) : ramp(-0.3, 0, room);
    const auto level = with_end(room);
    EXPECT_EQ(found(level, Proof::calendar, 0), nullptr) << trial << ' ' << list(level);
  }
}

// Of flat slices the constants alone are compared.
TEST(Certify, EndsOfFlatSlicesInTheWrongOrderAreRefused) {
  for (const double end : {0.062, std::nextafter(0.0625, 1), 0.063}) {
    Surface s{"FLAT", {}, {slice_at(0.5, {0.125, 0, 0}), slice_at(1, {0.1875, 0, 0})}};
    s.slices[0].overlay = ramp(-0.3, 0, end);
    const auto c = certify(s);
    EXPECT_EQ(found(c, Proof::calendar, 0) == nullptr, end < 0.0625) << end << ' ' << list(c);
  }
}

// Both ends are in order, and between the knots of one slice, from -1 to -0.4, and those of the
// next, from 0.4, one has its right end and the other its left. The backbones are 0.0182 apart near
// 0.25, and 0.0187 or more where the knots are.
TEST(Certify, EndsInTheWrongOrderBetweenTheKnotsOfTwoSlicesAreFound) {
  for (const double end : {0.018, 0.0184}) {
    Surface s{"GAPS", {}, {slice_at(0.5, {0.04, -0.3, 0.1}), slice_at(1, {0.06, -0.3, 0.149})}};
    s.slices[0].overlay = ramp(-1, 0, end);
    s.slices[1].overlay = ramp(0.4, 0, end);
    const auto c = certify(s);
    const Finding* f = found(c, Proof::calendar, 0);
    double least = kInfinity;
    for (int i = 0; i <= 1000; ++i) {
      const double k = std::lerp(-1, 1, i / 1000.0);
      least = std::min(least,
                       surface::smile_of(s.slices[1], k).w - surface::smile_of(s.slices[0], k).w);
    }
    EXPECT_EQ(least<0, end> 0.0182) << least;
    ASSERT_EQ(f == nullptr, least > 0) << end << ' ' << list(c);
    if (!f) continue;
    EXPECT_TRUE(f->broken);
    EXPECT_NEAR(f->k, 0.25, 0.15);
    EXPECT_LT(exact_w(s.slices[1], f->k), exact_w(s.slices[0], f->k));
  }
}

// A range between two neighbouring doubles, the middle of which is one of them.
TEST(Certify, KnotsOneUnitApartKeepTheSidesOfTheirOverlays) {
  double start = -0.1;
  for (int trial = 0; trial < 4; ++trial) {
    start = std::nextafter(start, 0);
    Surface s{"UNIT", {}, {slice_at(0.5, {0.04, -0.3, 0.1}), slice_at(1, {0.05, -0.3, 0.11})}};
    s.slices[0].overlay = ramp(-0.1, 0, -0.02);
    s.slices[1].overlay = s.slices[0].overlay;
    s.slices[1].overlay.knots.front() = start;
    s.slices[0].overlay.knots.front() = std::nextafter(start, -1);
    const auto c = certify(s);
    EXPECT_EQ(found(c, Proof::calendar, 0), nullptr) << trial << ' ' << list(c);
  }
}

// ---- Between slices ----

double least_between(const Surface& s, std::size_t i, double low, double high) {
  double least = kInfinity;
  const double first = s.slices[i].year_fraction, last = s.slices[i + 1].year_fraction;
  for (int j = 1; j < 20; ++j) {
    const surface::TimedSmile smile(s, std::lerp(first, last, j / 20.0));
    for (int n = 0; n <= 200; ++n) {
      least = std::min(least, durrleman_at(smile, std::lerp(low, high, n / 200.0)));
    }
  }
  return least;
}

// Two slices that meet C1 and C2 with skews as different as may be.
Surface different_skews(Random& random) {
  for (;;) {
    SliceParameters a{log_uniform(random, 0.01, 0.1), uniform(random, -0.9, 0.9), 0};
    SliceParameters b{a.theta * uniform(random, 1, 4), uniform(random, -0.9, 0.9), 0};
    a.psi = uniform(random, 0, 1) * largest_psi(a.theta, a.rho);
    b.psi = uniform(random, 0, 1) * largest_psi(b.theta, b.rho);
    const bool ordered = b.psi * (1 + b.rho) > a.psi * (1 + a.rho) &&
                         b.psi * (1 - b.rho) > a.psi * (1 - a.rho) &&
                         b.psi / b.theta < a.psi / a.theta;
    if (ordered) return {"SKEW", {}, {slice_at(0.5, a), slice_at(1, b)}};
  }
}

// Both slices are free, and close to g = 0 at the same place, where their slopes differ.
TEST(Certify, BreaksBetweenFreeSlicesAreFoundAndThePriceRuleCertifies) {
  Random random(11);
  int broken = 0, free = 0;
  for (int trial = 0; trial < 300; ++trial) {
    Surface s = different_skews(random);
    const double deviation = std::sqrt(s.slices[0].backbone.theta);
    const double start = deviation * uniform(random, -5, 5);
    const double width = deviation * log_uniform(random, 0.01, 0.3);
    for (Slice& slice : s.slices) {
      const auto least = [&](double size) {
        slice.overlay = bump(start, width, size);
        return least_over(slice.overlay, [&](double k) { return durrleman_at(slice, k); });
      };
      const double size = critical_size(1e-3 * width * width, least);
      slice.overlay = bump(start, width, size * uniform(random, 0.9, 0.999));
    }
    const auto c = certify(s);
    if (found(c, Proof::butterfly, 0) || found(c, Proof::butterfly, 1) ||
        found(c, Proof::calendar, 0))
      continue;
    const double least = least_between(s, 0, start, start + width);
    const Finding* f = found(c, Proof::between, 0);
    if (least < -1e-9) {
      ASSERT_NE(f, nullptr) << trial << " least " << least;
    }
    if (!f) {
      ++free;
      continue;
    }
    EXPECT_TRUE(f->broken) << trial << ' ' << list(c) << " least " << least;
    EXPECT_GE(f->k, start);
    EXPECT_LE(f->k, start + width);
    ++broken;
    const Surface repaired = with_proved_rules(s);
    EXPECT_EQ(repaired.slices[0].to_next, Between::price);
    const auto again = certify(repaired);
    EXPECT_EQ(found(again, Proof::between, 0), nullptr);
    if (broken > 8) continue;
    // Both bumps times the critical factor, a little more, a little less.
    const auto with_bumps = [&](double factor) {
      Surface out = s;
      for (Slice& slice : out.slices) slice.overlay.coefficients[1] *= factor;
      return out;
    };
    const double factor = critical_size(
        0.5, [&](double size) { return least_between(with_bumps(size), 0, start, start + width); });
    // The least over 19 weights and 201 places is seen to a few 1e-3 of what g varies by.
    constexpr double kMore = 1.01, kLess = 0.99;
    if (factor * kMore < 1) {
      const auto over = certify(with_bumps(factor * kMore));
      f = found(over, Proof::between, 0);
      ASSERT_NE(f, nullptr) << trial;
      EXPECT_TRUE(f->broken) << trial << ' ' << list(over);
    }
    const auto under = certify(with_bumps(factor * kLess));
    EXPECT_EQ(found(under, Proof::between, 0), nullptr) << trial << ' ' << list(under);
  }
  EXPECT_GT(broken, 10);
  EXPECT_GT(free, 200);
}

TEST(WithProvedRules, KeepsTheRuleWhereItIsProvedAndPriceWhereItIsPrice) {
  Random random(12);
  Surface s = random_surface(random, 4, 0.002);
  s.slices[1].to_next = Between::price;
  const Surface out = with_proved_rules(s);
  EXPECT_EQ(out.slices[0].to_next, Between::variance);
  EXPECT_EQ(out.slices[1].to_next, Between::price);
  EXPECT_EQ(out.slices[2].to_next, Between::variance);
  EXPECT_EQ(out.slices[3].to_next, Between::variance);
}

// ---- All times ----

// Rounding of g: 1e-12, as in surface_checks.cc. Under the price rule it is that of an inversion.
constexpr double kRounding = 1e-12, kMixed = 1e-7;

bool has_price_rule(const Surface& s) {
  return std::any_of(s.slices.begin(), s.slices.end(),
                     [](const Slice& slice) { return slice.to_next == Between::price; });
}

// Before, at, between and after the slices.
TEST(Certify, CertifiedSurfacesHaveNoNegativeDensityAndNoFallAtAnyTime) {
  Random random(13);
  int certified = 0;
  for (int trial = 0; trial < 60; ++trial) {
    Surface s = random_surface(random, 3, log_uniform(random, 0.002, 0.05));
    if (trial % 3 == 0) s.slices[trial % 2].to_next = Between::price;
    s = with_proved_rules(s);
    if (!certify(s).certified) continue;
    ++certified;
    if (!has_price_rule(s)) {
      EXPECT_TRUE(check_surface(s).violations.empty()) << trial;
    }
    const double last = s.slices[2].year_fraction, unit = std::sqrt(s.slices[2].backbone.theta);
    std::vector<double> times{last * 1e-4, last * 100};
    for (int i = 0; i < 12; ++i) times.push_back(uniform(random, 0.01, 2.5) * last);
    std::sort(times.begin(), times.end());
    for (int i = -100; i <= 100; ++i) {
      // Within 6 deviations prices have their digits; beyond them are hyperbolas.
      const double k = 6 * unit * std::sinh(0.03 * i) / std::sinh(3);
      double before = 0;
      for (const double t : times) {
        const surface::TimedSmile smile(s, t);
        const auto next = std::find_if(s.slices.begin(), s.slices.end(),
                                       [&](const Slice& x) { return x.year_fraction >= t; });
        const bool mixed = next != s.slices.begin() && next != s.slices.end() &&
                           (next - 1)->to_next == Between::price;
        if (!mixed || std::abs(k) < 5 * std::sqrt(smile.at(0).w)) {
          EXPECT_GE(durrleman_at(smile, k), mixed ? -kMixed : -kRounding) << trial << " t " << t;
        }
        const double w = smile.at(k).w;
        EXPECT_GE(w, before * (1 - kRounding)) << trial << " t " << t << " k " << k;
        before = w;
      }
    }
  }
  EXPECT_GT(certified, 30);
}

// ---- After the last slice ----

// A hump between two dips, as high as the butterfly allows times `share`.
enum class Hump {
  anywhere,  // within three deviations
  falling,  // where k w' < 0 of the backbone, which is lowest at k = -2 rho theta / psi: rise fails
  near,     // where |w'| is 4 |k| and some more: turn fails and rise does not
};
Slice w_shaped(Random& random, double share, Hump where) {
  const double theta = log_uniform(random, 1e-4, 0.3), rho = uniform(random, -0.7, 0.7);
  Slice out = slice_at(1, {theta, rho, uniform(random, 0.2, 0.7) * largest_psi(theta, rho)});
  const double deviation = std::sqrt(theta), lowest = -2 * rho * theta / out.backbone.psi;
  double middle = deviation * uniform(random, -3, 3), unit = deviation * uniform(random, 0.1, 0.5);
  if (where != Hump::anywhere) unit *= 0.1;
  if (where == Hump::falling) middle = lowest * uniform(random, 0.3, 0.8);
  if (where == Hump::near) {
    unit *= 0.1;
    middle = 0;
    for (int i = 0; i < 30; ++i) {
      const auto p = surface::smile_at(out.backbone, middle);
      middle = -0.25 * p.dw_dk / (1 + 0.25 * std::abs(middle * p.dw_dk) / p.w);
    }
  }
  for (int i = -6; i <= 6; ++i) out.overlay.knots.push_back(middle + unit * i);
  const auto set = [&](double size) {
    out.overlay.coefficients = {0, 0, -0.3, -0.6, 0.3, 1, 0.3, -0.6, -0.3, 0, 0};
    for (double& c : out.overlay.coefficients) c *= size;
  };
  const auto least = [&](double size) {
    set(size);
    // Not past where there is no variance.
    return least_over(out.overlay, [&](double k) {
      const auto p = surface::smile_of(out, k);
      return p.w > 0 ? surface::durrleman(p, k) : -1;
    });
  };
  set(share * critical_size(1e-3 * theta, least));
  return out;
}

// Least of f over the knots and far past them.
double least_everywhere(const Slice& slice, const std::function<double(double)>& f) {
  double least = least_over(slice.overlay, f);
  for (int i = -400; i <= 400; ++i) least = std::min(least, f(0.5 * std::sinh(0.02 * i)));
  return least;
}

TEST(Certify, VarianceAddedToWShapedSlicesIsProvedExactlyWhereItsConditionsHold) {
  Random random(14);
  int proved = 0, undecided = 0, negative = 0;
  for (int trial = 0; trial < 300; ++trial) {
    const Slice slice = w_shaped(random, trial % 3 == 2 ? 0.9999 : uniform(random, 0.7, 0.999),
                                 static_cast<Hump>(trial % 3));
    const Surface s{"WWWW", {}, {slice}};
    const auto c = certify(s);
    if (found(c, Proof::butterfly, 0) || found(c, Proof::positive, 0)) continue;
    const Finding* f = found(c, Proof::after, 0);
    const double least = least_everywhere(slice, [&](double k) { return growth_at(slice, k); });
    double least_g = kInfinity;
    for (const double added : {1e-4, 1e-3, 0.01, 0.1, 0.3, 1.0, 3.0, 10.0, 100.0, 1e4}) {
      const surface::TimedSmile smile(s, 1 + added);
      least_g = std::min(least_g,
                         least_everywhere(slice, [&](double k) { return durrleman_at(smile, k); }));
    }
    if (!f) {
      EXPECT_GE(least, -kRounding) << trial;
      EXPECT_GE(least_g, -kRounding) << trial;
      ++proved;
      continue;
    }
    ++undecided;
    EXPECT_FALSE(f->broken) << trial;
    // Where it was left open a condition fails at a point beside it.
    EXPECT_LT(least, 0) << trial << ' ' << list(c);
    negative += least_g < -kRounding;
  }
  EXPECT_GT(proved, 50);
  EXPECT_GT(undecided, 30);
  EXPECT_GT(negative, 20);
}

// ---- What is not a surface ----

TEST(Certify, NoNumberIsEverCertified) {
  Random random(15);
  for (const double bad : {kNaN, kInfinity, -kInfinity}) {
    const Surface good = random_surface(random, 2, 0.002);
    ASSERT_TRUE(certify(good).certified);
    const std::array<std::function<double&(Surface&)>, 8> places{
        [](Surface& s) -> double& { return s.slices[1].backbone.theta; },
        [](Surface& s) -> double& { return s.slices[1].backbone.rho; },
        [](Surface& s) -> double& { return s.slices[0].backbone.psi; },
        [](Surface& s) -> double& { return s.slices[1].year_fraction; },
        [](Surface& s) -> double& { return s.slices[1].overlay.knots[4]; },
        [](Surface& s) -> double& { return s.slices[0].overlay.coefficients[4]; },
        [](Surface& s) -> double& { return s.slices[1].overlay.coefficients.front(); },
        [](Surface& s) -> double& { return s.slices[0].overlay.knots.back(); }};
    for (std::size_t i = 0; i < places.size(); ++i) {
      Surface s = good;
      places[i](s) = bad;
      const auto c = certify(s);
      EXPECT_FALSE(c.certified) << i << ' ' << bad;
      EXPECT_FALSE(c.findings.empty());
      EXPECT_EQ(with_proved_rules(s).slices[0].to_next, Between::price);
    }
  }
  EXPECT_FALSE(certify({"NONE", {}, {}}).certified);
}

TEST(Certify, NumbersNearOverflowAreNotCertifiedAndEnd) {
  for (const double theta : {1e300, 1e-300})
    for (const double width : {1e-300, 1.0, 1e300}) {
      Surface s{"EDGE", {}, {slice_at(1, {theta, -0.5, 0.5})}};
      s.slices[0].overlay = bump(0, width, 1);
      const auto c = certify(s);
      EXPECT_LE(c.boxes, 3 * CertificateOptions{}.most_boxes);
      EXPECT_FALSE(c.certified && theta < 1);
    }
}

// Two equal overlaid slices touch everywhere.
TEST(Certify, TouchingSlicesAreLeftOpenWithinTheBudget) {
  Random random(16);
  Surface s = random_surface(random, 1, 0.002);
  s.slices.push_back(s.slices[0]);
  s.slices[1].year_fraction *= 1.001;
  const auto c = certify(s);
  const Finding* f = found(c, Proof::calendar, 0);
  ASSERT_NE(f, nullptr);
  EXPECT_FALSE(f->broken);
  EXPECT_LT(c.boxes, 10'000);
}

TEST(Certify, BudgetIsKept) {
  Random random(17);
  const Surface s = random_surface(random, 3, 0.002);
  const auto c = certify(s, {.most_boxes = 5});
  EXPECT_FALSE(c.certified);
  EXPECT_LE(c.boxes, 4 * 3 * 5);
  for (const Finding& f : c.findings) EXPECT_FALSE(f.broken);
  EXPECT_EQ(CertificateOptions{}.problem(), std::nullopt);
  EXPECT_NE(CertificateOptions{.most_boxes = 0}.problem(), std::nullopt);
  EXPECT_FALSE(certify(s, {.most_boxes = 0}).certified);
}

}  // namespace
}  // namespace duskgrid::arbitrage
