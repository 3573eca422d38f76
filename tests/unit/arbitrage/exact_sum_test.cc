#include "arbitrage/exact_sum.h"

#include <gtest/gtest.h>

#include <boost/multiprecision/cpp_int.hpp>
#include <cmath>
#include <limits>
#include <random>

namespace duskgrid::arbitrage {
namespace {

using Rational = boost::multiprecision::cpp_rational;

int sign_of(const ExactSum& sum) {
  if (sum.negative()) return -1;
  if (sum.positive()) return 1;
  return sum.not_negative() ? 0 : 2;
}

// x y - (x y as rounded) - z and the like: all signs occur, by rests far below a unit.
TEST(ExactSum, SignIsThatOfRationalArithmetic) {
  std::mt19937_64 random(3);
  std::uniform_real_distribution<double> uniform(0.1, 2);
  int zeros = 0;
  for (int trial = 0; trial < 20'000; ++trial) {
    const double x = uniform(random), y = uniform(random), z = uniform(random) * 1e-17;
    const double p = x * y, rest = std::fma(x, y, -p);
    const double last = trial % 3 == 0 ? rest : trial % 3 == 1 ? std::nextafter(rest, 1) : -z;
    const Rational exact = Rational(x) * Rational(y) - Rational(p) - Rational(last);
    const auto sum = ExactSum().add(-p).add_product(x, y).add(-last);
    ASSERT_EQ(sign_of(sum), exact.sign()) << trial;
    Rational total = 0;
    for (const double part : sum.parts()) total += part;
    ASSERT_TRUE(sum.known() && total == exact) << trial;
    zeros += exact.sign() == 0;
  }
  EXPECT_GT(zeros, 6'000);
}

TEST(ExactSum, SumOfNothingIsZero) { EXPECT_EQ(sign_of(ExactSum()), 0); }

TEST(ExactSum, SignIsNotKnownPastTheRangeOfDoubles) {
  constexpr double kLargest = std::numeric_limits<double>::max();
  EXPECT_EQ(sign_of(ExactSum().add_product(1e-200, 1e-200)), 2);
  EXPECT_EQ(sign_of(ExactSum().add(kLargest).add(kLargest)), 2);
  EXPECT_EQ(sign_of(ExactSum().add(std::numeric_limits<double>::quiet_NaN())), 2);
  EXPECT_EQ(sign_of(ExactSum().add(std::numeric_limits<double>::infinity())), 2);
  EXPECT_EQ(sign_of(ExactSum().add_product(0, 1e-200).add(1)), 1);
}

}  // namespace
}  // namespace duskgrid::arbitrage
