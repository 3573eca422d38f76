#include "arbitrage/affine.h"

#include <gtest/gtest.h>

#include <array>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <random>

namespace duskgrid::arbitrage {
namespace {

using Exact = boost::multiprecision::cpp_bin_float_50;
using Random = std::mt19937_64;

constexpr double kInfinity = std::numeric_limits<double>::infinity();

double uniform(Random& random, double low, double high) {
  return std::uniform_real_distribution<double>(low, high)(random);
}

// Every operation rounds its own e up by 32 u of it, 4e-31 of the result; the error of 50 digits is
// far below.
bool contains(const Affine& a, double xi, const Exact& value) {
  if (!std::isfinite(a.e)) return true;
  return abs(value - (Exact(a.c) + Exact(a.d) * xi)) <= a.e;
}

// A number with its value at each of the places that are looked at.
constexpr std::size_t kPlaces = 4;
struct Traced {
  Affine affine;
  std::array<Exact, kPlaces> exact;
};

template <class AffineOp, class ExactOp>
Traced apply(const Traced& a, const Traced& b, AffineOp affine, ExactOp exact) {
  Traced out{affine(a.affine, b.affine), {}};
  for (std::size_t i = 0; i < kPlaces; ++i) out.exact[i] = exact(a.exact[i], b.exact[i]);
  return out;
}

Traced operation(int which, const Traced& a, const Traced& b) {
  switch (which) {
    case 0: return apply(a, b, std::plus<>{}, std::plus<Exact>{});
    case 1: return apply(a, b, std::minus<>{}, std::minus<Exact>{});
    case 2: return apply(a, b, std::multiplies<>{}, std::multiplies<Exact>{});
    case 3: return apply(a, b, std::divides<>{}, std::divides<Exact>{});
    case 4:
      return apply(
          a, b, [](const Affine& x, const Affine&) { return sqrt(x); },
          [](const Exact& x, const Exact&) { return x < 0 ? Exact(0) : Exact(sqrt(x)); });
    default:
      return apply(
          a, b, [](const Affine& x, const Affine&) { return scaled(x, -0.3); },
          [](const Exact& x, const Exact&) { return Exact(x * Exact(-0.3)); });
  }
}

// Ranges of every width relative to their place, and sizes from 2^-60 to 2^60.
Traced a_range(Random& random, const std::array<double, kPlaces>& xi) {
  const double middle = uniform(random, -1, 4) * std::exp2(uniform(random, -60, 60));
  const double width = std::abs(middle) * std::exp2(uniform(random, -56, 1));
  Traced out{Affine::range(middle, middle + width), {}};
  for (std::size_t i = 0; i < kPlaces; ++i)
    out.exact[i] = Exact(out.affine.c) + Exact(out.affine.d) * xi[i];
  return out;
}

TEST(Affine, AMillionRandomValuesLieInside) {
  Random random(20251);
  int bounded = 0;
  for (int trial = 0; trial < 50'000; ++trial) {
    const std::array<double, kPlaces> xi{-1, 1, uniform(random, -1, 1), uniform(random, -1, 1)};
    std::array<Traced, 8> pool;
    for (std::size_t i = 0; i < 3; ++i) pool[i] = a_range(random, xi);
    for (std::size_t i = 3; i < pool.size(); ++i) {
      std::uniform_int_distribution<std::size_t> pick(0, i - 1);
      const int which = std::uniform_int_distribution<int>(0, 5)(random);
      pool[i] = operation(which, pool[pick(random)], pool[pick(random)]);
      const Affine& a = pool[i].affine;
      if (!std::isfinite(a.e)) {
        // Nothing is proved of what is not bounded; and it is not to be computed with.
        EXPECT_FALSE(a.lower() > -kInfinity);
        EXPECT_FALSE(a.upper() < kInfinity);
        pool[i] = a_range(random, xi);
        continue;
      }
      ++bounded;
      for (std::size_t j = 0; j < kPlaces; ++j) {
        const Exact& value = pool[i].exact[j];
        ASSERT_TRUE(contains(a, xi[j], value)) << "trial " << trial << " operation " << which;
        ASSERT_LE(a.lower(), value);
        ASSERT_GE(a.upper(), value);
      }
    }
  }
  EXPECT_GE(bounded * static_cast<int>(kPlaces), 750'000);
}

// Exact numbers: only rounding is left, and it is all inside. e stays within 40 u of the result.
TEST(Affine, RoundingOfExactNumbersIsInsideAndSmall) {
  constexpr double kFewUnits = 40 * 0x1p-53;  // 8 u a root or quotient, thrice 3 u a product
  Random random(7);
  for (int trial = 0; trial < 50'000; ++trial) {
    const double x = uniform(random, 0.1, 10), y = uniform(random, 0.1, 10);
    const Affine quotient = Affine(x) / y, root = sqrt(Affine(x)), product = Affine(x) * y;
    ASSERT_TRUE(contains(quotient, 0, Exact(x) / y));
    ASSERT_TRUE(contains(root, 0, sqrt(Exact(x))));
    ASSERT_TRUE(contains(product, 0, Exact(x) * y));
    ASSERT_TRUE(contains(Affine(x) - y, 0, Exact(x) - y));
    for (const Affine& a : {quotient, root, product}) ASSERT_LE(a.e, kFewUnits * a.c);
  }
}

// Where results underflow, relative bounds do not hold; kTiny does.
TEST(Affine, UnderflowIsInside) {
  Random random(8);
  for (int trial = 0; trial < 20'000; ++trial) {
    const double x = uniform(random, 1, 2) * std::exp2(uniform(random, -1070, -500));
    const double y = uniform(random, 1, 2) * std::exp2(uniform(random, -600, 0));
    ASSERT_TRUE(contains(Affine(x) * y, 0, Exact(x) * y));
    ASSERT_TRUE(contains(scaled(x, y), 0, Exact(x) * y));
    ASSERT_TRUE(contains(Affine(x) - Affine(0.75 * x), 0, Exact(x) - Exact(0.75 * x)));
    ASSERT_TRUE(contains(Affine(x) / (1 / y), 0, Exact(x) / (1 / y)));
    ASSERT_TRUE(contains(sqrt(Affine(x)), 0, sqrt(Exact(x))));
  }
}

TEST(Affine, WidthBeyondTheSlopeFallsWithTheSquareOfTheRange) {
  const auto f = [](double reach) {
    const Affine k = Affine::range(0.7 - reach, 0.7 + reach);
    return (k * square(k) / (1.0 + k) + sqrt(k)).e;
  };
  for (double reach = 0.05; reach > 1e-4; reach /= 2) {
    EXPECT_GT(f(reach) / f(reach / 2), 3.9);
    EXPECT_LT(f(reach) / f(reach / 2), 4.6);  // third order, at a reach of 0.05
  }
}

TEST(Affine, RangeHoldsBothEnds) {
  Random random(9);
  for (int trial = 0; trial < 50'000; ++trial) {
    const double low = uniform(random, -3, 3), high = low + std::exp2(uniform(random, -50, 2));
    const Affine a = Affine::range(low, high);
    ASSERT_LE(Exact(a.c) - Exact(a.d), low);
    ASSERT_GE(Exact(a.c) + Exact(a.d), high);
  }
}

TEST(Affine, QuotientByWhatMayBeZeroIsUnbounded) {
  for (const Affine& a : {Affine(0.0), Affine::range(-1, 2), Affine::range(0, 1),
                          Affine(1e-20, 0, 1e-20), Affine(1, 0.5, 0.5)})
    EXPECT_FALSE(reciprocal(a).lower() > -kInfinity) << a.c << ' ' << a.d << ' ' << a.e;
}

TEST(Affine, RootOfWhatMayBeNegativeIsUnbounded) {
  for (const Affine& a : {Affine(0.0), Affine(-1.0), Affine::range(-0.1, 2), Affine(1, 0.5, 0.51)})
    EXPECT_FALSE(sqrt(a).lower() > -kInfinity) << a.c << ' ' << a.d << ' ' << a.e;
}

TEST(Affine, NothingIsProvedOfNoNumber) {
  for (const double bad : {kInfinity, -kInfinity, std::numeric_limits<double>::quiet_NaN()})
    for (const Affine& a : {Affine(bad) + 1.0, Affine(bad) * 0.0, 1.0 / Affine(bad),
                            sqrt(Affine(bad)), Affine(1e300) * Affine(1e300) + 1.0}) {
      EXPECT_FALSE(a.lower() >= 0);
      EXPECT_FALSE(a.upper() < 0);
      EXPECT_FALSE(a.upper_at_centre() < 0);
    }
}

}  // namespace
}  // namespace duskgrid::arbitrage
