#include "market/dates.h"

#include <gtest/gtest.h>

namespace duskgrid::market {
namespace {

using namespace std::chrono;
using quotes::Clock;
using quotes::Instant;

const Clock kFiveWest{"", minutes{-300}};

Instant local(year_month_day date, seconds time, const Clock& clock = kFiveWest) {
  return quotes::to_instant(clock, date, time);
}

TEST(ParseTenor, EveryUnitIsReadInEitherCase) {
  const struct {
    const char* text;
    int count;
    TenorUnit unit;
  } cases[] = {{"1D", 1, TenorUnit::day},
               {"2w", 2, TenorUnit::week},
               {"18M", 18, TenorUnit::month},
               {"10y", 10, TenorUnit::year},
               {"999d", 999, TenorUnit::day}};
  for (const auto& c : cases) {
    const auto tenor = parse_tenor(c.text);
    ASSERT_TRUE(tenor) << c.text;
    EXPECT_EQ(tenor->count, c.count) << c.text;
    EXPECT_EQ(tenor->unit, c.unit) << c.text;
  }
}

TEST(ParseTenor, MalformedTextGivesNothing) {
  for (const char* text :
       {"", "M", "3", "0M", "-1M", "+1M", "1.5Y", "3X", "1000D", "3MM", " 3M", "3 M"})
    EXPECT_FALSE(parse_tenor(text)) << '"' << text << '"';
}

TEST(AddTenor, DaysAndWeeksKeepTheLocalTimeOfDay) {
  const auto from = local(2031y / March / 14, 16h);
  EXPECT_EQ(add_tenor(from, {3, TenorUnit::day}, kFiveWest), local(2031y / March / 17, 16h));
  EXPECT_EQ(add_tenor(from, {2, TenorUnit::week}, kFiveWest), local(2031y / March / 28, 16h));
}

TEST(AddTenor, MonthKeepsTheDayAcrossAYearEnd) {
  EXPECT_EQ(add_tenor(local(2031y / November / 14, 16h), {3, TenorUnit::month}, kFiveWest),
            local(2032y / February / 14, 16h));
}

TEST(AddTenor, DayThatAShorterMonthLacksBecomesItsLast) {
  EXPECT_EQ(add_tenor(local(2031y / January / 31, 16h), {1, TenorUnit::month}, kFiveWest),
            local(2031y / February / 28, 16h));
  EXPECT_EQ(add_tenor(local(2031y / March / 31, 16h), {1, TenorUnit::month}, kFiveWest),
            local(2031y / April / 30, 16h));
}

TEST(AddTenor, LeapDayPlusAYearIsTheLastOfFebruary) {
  EXPECT_EQ(add_tenor(local(2032y / February / 29, 16h), {1, TenorUnit::year}, kFiveWest),
            local(2033y / February / 28, 16h));
}

// 23:00 five hours west of UTC is already the next day in UTC.
TEST(AddTenor, TheDateIsTheClocksNotUtcs) {
  EXPECT_EQ(add_tenor(local(2031y / January / 30, 23h), {1, TenorUnit::month}, kFiveWest),
            local(2031y / February / 28, 23h));
}

TEST(AddTenor, ZoneClockKeepsTheLocalTimeOverAClockChange) {
  const Clock eastern{"America/New_York", {}};
  // Summer time there starts on 2031-03-09: 16:00 local moves from 21:00 to 20:00 UTC.
  const Instant winter = sys_days{2031y / March / 7} + 21h;
  EXPECT_EQ(add_tenor(winter, {1, TenorUnit::week}, eastern), sys_days{2031y / March / 14} + 20h);
}

TEST(BusinessDays, WeekendsAndHolidaysAreSkipped) {
  const sys_days friday = 2031y / March / 14, monday = 2031y / March / 17;
  EXPECT_EQ(business_days(friday, monday, {}), 1);
  EXPECT_EQ(business_days(friday, friday + days{2}, {}), 0);
  EXPECT_EQ(business_days(friday, friday + days{14}, {}), 10);
  EXPECT_EQ(business_days(friday, friday + days{14}, {monday, friday + days{12}}), 8);
  // A holiday on a weekend counts once.
  EXPECT_EQ(business_days(friday, monday, {friday + days{1}}), 1);
}

TEST(BusinessDays, BackwardOrTheSameDayIsNone) {
  const sys_days friday = 2031y / March / 14;
  EXPECT_EQ(business_days(friday, friday, {}), 0);
  EXPECT_EQ(business_days(friday, friday - days{30}, {}), 0);
}

TEST(LocalDate, IsThatOfTheClock) {
  const auto late = local(2031y / March / 14, 23h);  // 04:00 of the 15th in UTC
  EXPECT_EQ(local_date(late, kFiveWest), sys_days{2031y / March / 14});
  EXPECT_EQ(local_date(late, Clock{"", minutes{0}}), sys_days{2031y / March / 15});
}

}  // namespace
}  // namespace duskgrid::market
