#include "publish/values.h"

#include <gtest/gtest.h>

#include <cmath>

#include "market/day_count.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;
using quotes::PutCall;

constexpr auto kMarch = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14};
constexpr auto kJune = std::chrono::sys_days{std::chrono::year{2031} / 6 / 20};
const quotes::Clock kClock{"", -300min};

surface::Slice slice(quotes::Instant expiry, double forward, double theta) {
  return {
      expiry, market::year_fraction(kMarch + 21h, expiry), forward, 0.99, {theta, -0.4, 0.1}, -0.3,
      0.2};
}

// June has a morning and an afternoon expiry.
StoredSurface stored() {
  return {{kMarch + 21h, kClock},
          {"HALYRD",
           100,
           {slice(kJune + 14h + 30min, 101, 0.01), slice(kJune + 21h, 101.5, 0.0102),
            slice(kJune + 24h * 200, 103, 0.03)}}};
}

TEST(TimesOfExpiry, ADateIsEveryExpiryOfTheSurfaceOnIt) {
  const auto s = stored();
  const auto times = times_of_expiry(s, "2031-06-20").value();
  ASSERT_EQ(times.size(), 2u);
  EXPECT_EQ(times[0].expiry, kJune + 14h + 30min);
  EXPECT_EQ(times[1].expiry, kJune + 21h);
  EXPECT_EQ(times[1].carried.forward, 101.5);
  EXPECT_EQ(times[1].year_fraction, s.surface.slices[1].year_fraction);
  EXPECT_EQ(times[1].tenor, "");
}

TEST(TimesOfExpiry, ADateIsThatOfTheClock) {
  auto s = stored();
  s.as_of.clock = {"", 600min};  // 21:00 UTC is the next day there
  const auto times = times_of_expiry(s, "2031-06-21").value();
  ASSERT_EQ(times.size(), 2u);
  EXPECT_EQ(times[0].expiry, kJune + 14h + 30min);
}

TEST(TimesOfExpiry, AnotherDateIsItsAfternoonAndCarriedBetweenExpiries) {
  const auto s = stored();
  const auto times = times_of_expiry(s, "20310801").value();
  ASSERT_EQ(times.size(), 1u);
  EXPECT_EQ(quotes::format_instant(kClock, times[0].expiry), "2031-08-01T16:00:00-05:00");
  EXPECT_EQ(times[0].year_fraction, market::year_fraction(kMarch + 21h, times[0].expiry));
  const auto carried = surface::carried_at(s.surface, times[0].year_fraction);
  EXPECT_EQ(times[0].carried.forward, carried.forward);
  EXPECT_EQ(times[0].carried.discount_factor, carried.discount_factor);
}

TEST(TimesOfExpiry, AnInstantIsItself) {
  const auto one = times_of_expiry(stored(), "2031-06-20T09:30").value();
  ASSERT_EQ(one.size(), 1u);
  EXPECT_EQ(one[0].carried.forward, 101);
  const auto noon = times_of_expiry(stored(), "2031-06-20T12:00:00-05:00").value();
  ASSERT_EQ(noon.size(), 1u);
  EXPECT_EQ(noon[0].expiry, kJune + 17h);
}

TEST(TimesOfExpiry, WhatIsNoDateOrNotAheadIsUsage) {
  for (const char* text : {"", "soon", "1M", "2031-02-30", "2031-03-14", "2031-03-14T15:59"}) {
    const auto times = times_of_expiry(stored(), text);
    ASSERT_FALSE(times.ok()) << text;
    EXPECT_EQ(times.failure().fault, Fault::usage) << text;
    EXPECT_NE(times.failure().detail.find(text), std::string::npos) << times.failure().detail;
  }
}

TEST(TimeOfTenor, IsCountedFromTheAsOf) {
  const auto time = time_of_tenor(stored(), "1M").value();
  EXPECT_EQ(quotes::format_instant(kClock, time.expiry), "2031-04-14T16:00:00-05:00");
  EXPECT_EQ(time.tenor, "1M");
  for (const char* text : {"", "M", "0D", "5", "1 M", "2031-06-20"})
    EXPECT_FALSE(time_of_tenor(stored(), text).ok()) << text;
}

TEST(ListedTimes, AreTheSlices) {
  const auto times = listed_times(stored());
  ASSERT_EQ(times.size(), 3u);
  EXPECT_EQ(times[2].carried.forward, 103);
}

TEST(ProblemOf, StrikesArePositiveAndMoneynessIsARatio) {
  for (const double v : {0.0, -1.0, double(INFINITY), double(NAN)}) {
    EXPECT_TRUE(problem_of({Axis::strike, v})) << v;
    EXPECT_TRUE(problem_of({Axis::moneyness, v})) << v;
  }
  EXPECT_TRUE(problem_of({Axis::moneyness, 90}));
  EXPECT_FALSE(problem_of({Axis::strike, 90}));
  EXPECT_FALSE(problem_of({Axis::log_moneyness, -3}));
  EXPECT_TRUE(problem_of({Axis::log_moneyness, double(NAN)}));
}

TEST(ValueAt, EveryAxisLeadsToTheSameOption) {
  const auto s = stored();
  const auto time = listed_times(s)[2];
  const surface::TimedSmile smile(s.surface, time.year_fraction);
  const auto strike = value_at(s.surface, smile, time.carried, {Axis::strike, 90});
  EXPECT_EQ(strike.strike, 90);
  const auto ratio = value_at(s.surface, smile, time.carried, {Axis::moneyness, 90.0 / 103});
  const auto log =
      value_at(s.surface, smile, time.carried, {Axis::log_moneyness, std::log(90.0 / 103)});
  // A logarithm and an exponential apart: a few ulp, times the price's slope over its value, 13.
  for (const auto& row : {ratio, log}) {
    EXPECT_NEAR(row.strike, 90, 1e-13);
    EXPECT_NEAR(row.k, strike.k, 1e-15);
    EXPECT_NEAR(row.derived->price / strike.derived->price, 1, 1e-13);
  }
  EXPECT_EQ(strike.derived->put_call, PutCall::put);
  const auto call = value_at(s.surface, smile, time.carried, {Axis::strike, 90, PutCall::call});
  EXPECT_EQ(call.derived->put_call, PutCall::call);
}

TEST(ValueAt, SupportIsThatOfTheGridWithoutQuotes) {
  auto s = stored();
  s.surface.slices[2].k_low = -0.5;
  s.surface.slices[2].k_high = 0.3;
  const auto support = [&](double t, double k) {
    const surface::TimedSmile smile(s.surface, t);
    return value_at(s.surface, smile, surface::carried_at(s.surface, t), {Axis::log_moneyness, k})
        .support;
  };
  const auto &a = s.surface.slices[1], &b = s.surface.slices[2];
  const double between = 0.5 * (a.year_fraction + b.year_fraction);
  for (const double k : {-0.3, 0.0, 0.2})
    EXPECT_EQ(support(a.year_fraction, k), Support::interpolated) << k;
  for (const double k : {-0.31, 0.21, -800.0, double(INFINITY)})
    EXPECT_EQ(support(a.year_fraction, k), Support::extrapolated) << k;
  // Half way the range is -0.4 to 0.25.
  for (const double k : {-0.39, 0.24}) EXPECT_EQ(support(between, k), Support::interpolated) << k;
  for (const double k : {-0.41, 0.26}) EXPECT_EQ(support(between, k), Support::extrapolated) << k;
  for (const double t : {0.01, 1.1 * b.year_fraction})
    EXPECT_EQ(support(t, 0), Support::extrapolated) << t;
}

TEST(ValueAt, PointsBeyondNumbersHaveNoValues) {
  const auto s = stored();
  const auto time = listed_times(s)[2];
  const surface::TimedSmile smile(s.surface, time.year_fraction);
  EXPECT_FALSE(value_at(s.surface, smile, time.carried, {Axis::log_moneyness, 800}).derived);
  EXPECT_FALSE(value_at(s.surface, smile, {INFINITY, 1}, {Axis::strike, 90}).derived);
}

}  // namespace
}  // namespace duskgrid::publish
