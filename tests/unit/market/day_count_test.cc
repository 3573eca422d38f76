#include "market/day_count.h"

#include <gtest/gtest.h>

namespace duskgrid::market {
namespace {

using namespace std::chrono;

constexpr quotes::Instant kAsOf = sys_days{2031y / March / 14} + 20h;

TEST(YearFraction, ThreeHundredSixtyFiveDaysAreOneYear) {
  EXPECT_EQ(year_fraction(kAsOf, kAsOf + days{365}), 1.0);
}

TEST(YearFraction, LeapYearIsLongerThanOne) {
  const auto from = sys_days{2032y / January / 1}, to = sys_days{2033y / January / 1};
  EXPECT_EQ(year_fraction(from, to), 366.0 / 365.0);
}

TEST(YearFraction, SecondsCount) { EXPECT_EQ(year_fraction(kAsOf, kAsOf + 1s), 1.0 / 31536000.0); }

TEST(YearFraction, EarlierEndIsNegative) {
  EXPECT_EQ(year_fraction(kAsOf, kAsOf - days{73}), -0.2);
}

TEST(YearFraction, SameInstantIsZero) { EXPECT_EQ(year_fraction(kAsOf, kAsOf), 0.0); }

}  // namespace
}  // namespace duskgrid::market
