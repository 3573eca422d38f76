#include "quotes/instants.h"

#include <gtest/gtest.h>

namespace duskgrid::quotes {
namespace {

using namespace std::chrono_literals;
using std::chrono::hours;
using std::chrono::minutes;
using std::chrono::seconds;
using std::chrono::sys_days;

// The changes of the clock below are those of the IANA time zone database: New York
// goes from -05:00 to -04:00 at 02:00 on the second Sunday of March and back at 02:00 on
// the first Sunday of November; Adelaide stands at +10:30 in its summer.
const Clock kNewYork{"America/New_York", 0min};
const Clock kUtc{};

Instant utc(int y, unsigned m, unsigned d, seconds time) {
  return sys_days{std::chrono::year{y} / static_cast<int>(m) / static_cast<int>(d)} + time;
}

TEST(Clock, KnownZoneOrPlausibleOffsetHasNoProblem) {
  EXPECT_FALSE(kNewYork.problem());
  EXPECT_FALSE(kUtc.problem());
  EXPECT_FALSE((Clock{"", -5h}.problem()));
}

TEST(Clock, UnknownZoneIsNamedInTheProblem) {
  for (const char* zone : {"Atlantis/Capital", "../../etc/passwd", "america/new_york", " "}) {
    const auto problem = Clock{zone, 0min}.problem();
    ASSERT_TRUE(problem) << zone;
    EXPECT_NE(problem->find(std::string("zone = ") + zone + ", must be"), std::string::npos);
  }
}

TEST(Clock, OffsetPastEighteenHoursIsAProblem) {
  EXPECT_FALSE((Clock{"", 18h}.problem()));
  EXPECT_TRUE((Clock{"", 18h + 1min}.problem()));
  EXPECT_TRUE((Clock{"", -18h - 1min}.problem()));
}

TEST(ToInstant, SummerAndWinterUseTheirOwnOffset) {
  EXPECT_EQ(to_instant(kNewYork, 2031y / 1 / 17, 16h), utc(2031, 1, 17, 21h));
  EXPECT_EQ(to_instant(kNewYork, 2031y / 6 / 20, 16h), utc(2031, 6, 20, 20h));
}

TEST(ToInstant, RulesOfTheZoneGoOnPastTheListedYears) {
  // Second Sunday of March 2040 is the 11th, first Sunday of November 2104 the 2nd.
  EXPECT_EQ(to_instant(kNewYork, 2037y / 7 / 17, 16h), utc(2037, 7, 17, 20h));
  EXPECT_EQ(to_instant(kNewYork, 2038y / 7 / 16, 16h), utc(2038, 7, 16, 20h));
  EXPECT_EQ(to_instant(kNewYork, 2040y / 2 / 29, 16h), utc(2040, 2, 29, 21h));
  EXPECT_EQ(to_instant(kNewYork, 2040y / 3 / 10, 16h), utc(2040, 3, 10, 21h));
  EXPECT_EQ(to_instant(kNewYork, 2040y / 3 / 11, 2h + 30min), utc(2040, 3, 11, 7h));
  EXPECT_EQ(to_instant(kNewYork, 2040y / 3 / 11, 16h), utc(2040, 3, 11, 20h));
  EXPECT_EQ(to_instant(kNewYork, 2104y / 11 / 1, 16h), utc(2104, 11, 1, 20h));
  EXPECT_EQ(to_instant(kNewYork, 2104y / 11 / 2, 1h + 30min), utc(2104, 11, 2, 5h + 30min));
  EXPECT_EQ(to_instant(kNewYork, 2104y / 11 / 2, 16h), utc(2104, 11, 2, 21h));
  EXPECT_EQ(to_instant({"Asia/Tokyo", 0min}, 2199y / 7 / 1, 16h), utc(2199, 7, 1, 7h));
}

TEST(ToInstant, RepeatedTimeIsTheEarlierReading) {
  EXPECT_EQ(to_instant(kNewYork, 2031y / 11 / 2, 1h + 30min), utc(2031, 11, 2, 5h + 30min));
}

TEST(ToInstant, SkippedTimeIsTheInstantOfTheChange) {
  EXPECT_EQ(to_instant(kNewYork, 2031y / 3 / 9, 2h + 30min), utc(2031, 3, 9, 7h));
}

TEST(ToInstant, FixedOffsetIsSubtracted) {
  EXPECT_EQ(to_instant({"", -5h}, 2031y / 6 / 20, 20h), utc(2031, 6, 21, 1h));
}

TEST(FormatInstant, OffsetIsWrittenWithItsSign) {
  EXPECT_EQ(format_instant(kNewYork, utc(2031, 3, 14, 20h)), "2031-03-14T16:00:00-04:00");
  EXPECT_EQ(format_instant(kUtc, utc(2031, 3, 14, 20h + 1s)), "2031-03-14T20:00:01+00:00");
  EXPECT_EQ(format_instant({"Australia/Adelaide", 0min}, utc(2031, 1, 14, 20h)),
            "2031-01-15T06:30:00+10:30");
  EXPECT_EQ(format_instant({"", -(3h + 30min)}, utc(2031, 1, 14, 2h)), "2031-01-13T22:30:00-03:30");
}

TEST(FormatInstant, OffsetWithSecondsStillNamesTheSameInstant) {
  // Monrovia stood at -00:44:30 until 1972 (IANA); ISO 8601 has no seconds of offset.
  const Clock monrovia{"Africa/Monrovia", 0min};
  const Instant instant = utc(1971, 6, 1, 12h);
  const std::string text = format_instant(monrovia, instant);
  EXPECT_EQ(resolve(*parse_date_cell(text), kUtc, 0s), instant) << text;
}

TEST(FormatInstant, NoInstantIsEmpty) {
  EXPECT_EQ(format_instant(kNewYork, kNoInstant), "");
  EXPECT_EQ(format_date(kNewYork, kNoInstant), "");
}

TEST(FormatInstant, ReadsBackToTheSameInstant) {
  for (const Clock& clock : {kNewYork, kUtc, Clock{"", 5h + 45min}, Clock{"", -9h - 30min}}) {
    for (Instant t = utc(2031, 1, 1, 0s); t < utc(2032, 1, 1, 0s); t += 7h + 13min + 11s) {
      const auto cell = parse_date_cell(format_instant(clock, t));
      ASSERT_TRUE(cell);
      ASSERT_EQ(resolve(*cell, kUtc, 0s), t) << format_instant(clock, t);
    }
  }
}

TEST(FormatInstant, NoonPastTheListedYearsReadsBackAsNoon) {
  for (const char* zone : {"America/New_York", "Australia/Adelaide", "Europe/Paris"}) {
    const Clock clock{zone, 0min};
    for (sys_days day = 2037y / 12 / 1; day < sys_days{2050y / 1 / 1};
         day += std::chrono::days{1}) {
      const std::string text = format_instant(clock, to_instant(clock, day, 12h));
      ASSERT_EQ(text.substr(10, 9), "T12:00:00") << zone << ' ' << text;
    }
  }
}

TEST(FormatDate, IsTheLocalDate) {
  EXPECT_EQ(format_date(kNewYork, utc(2031, 3, 15, 3h)), "2031-03-14");
  EXPECT_EQ(format_date(kUtc, utc(2031, 3, 15, 3h)), "2031-03-15");
}

TEST(ParseDateCell, DateAloneHasNoTime) {
  for (const char* text : {"2031-06-20", "20310620"}) {
    const auto cell = parse_date_cell(text);
    ASSERT_TRUE(cell) << text;
    EXPECT_EQ(cell->date, 2031y / 6 / 20);
    EXPECT_FALSE(cell->time_of_day);
    EXPECT_FALSE(cell->offset);
  }
}

TEST(ParseDateCell, EveryWrittenFormOfATimeIsRead) {
  for (const char* text : {"2031-06-20T16:00", "2031-06-20 16:00", "2031-06-20T16:00:00",
                           "2031-06-20 16:00:00.000", "2031-06-20T16:00:00.987654321"}) {
    const auto cell = parse_date_cell(text);
    ASSERT_TRUE(cell) << text;
    EXPECT_EQ(cell->date, 2031y / 6 / 20) << text;
    EXPECT_EQ(cell->time_of_day, seconds{16h}) << text;
    EXPECT_FALSE(cell->offset) << text;
  }
}

TEST(ParseDateCell, EveryWrittenFormOfAnOffsetIsRead) {
  const std::pair<const char*, minutes> kCases[] = {{"2031-06-20T16:00Z", 0min},
                                                    {"2031-06-20T16:00:00+05:30", 330min},
                                                    {"2031-06-20 16:00:00.5-0400", -240min},
                                                    {"2031-06-20T16:00-00:30", -30min}};
  for (const auto& [text, offset] : kCases) {
    const auto cell = parse_date_cell(text);
    ASSERT_TRUE(cell) << text;
    EXPECT_EQ(cell->offset, offset) << text;
  }
}

TEST(ParseDateCell, NineToElevenDigitsAreUnixSeconds) {
  EXPECT_EQ(parse_date_cell("1939752000")->instant, utc(2031, 6, 20, 20h));
  EXPECT_EQ(parse_date_cell("100000000")->instant, Instant{100'000'000s});
  EXPECT_EQ(parse_date_cell("07258118399")->instant, utc(2199, 12, 31, 24h - 1s));
}

TEST(ParseDateCell, NumbersOfAnyOtherWidthOrYearAreRefused) {
  for (const char* text : {"", "0", "2031062", "07258118400", "99999999999", "193975200000",
                           "21990229", "22000101", "19691231", "00000000"}) {
    EXPECT_FALSE(parse_date_cell(text)) << text;
  }
}

TEST(ParseDateCell, DatesAndTimesThatDoNotExistAreRefused) {
  for (const char* text :
       {"2031-02-29", "2031-13-01", "2031-00-10", "2031-06-31", "2031-06-00", "1969-12-31",
        "2200-01-01", "2031-06-20T24:00", "2031-06-20T16:60", "2031-06-20T16:00:60",
        "2031-06-20T16:00+19:00", "2031-06-20T16:00+05:60"}) {
    EXPECT_FALSE(parse_date_cell(text)) << text;
  }
  EXPECT_TRUE(parse_date_cell("2032-02-29"));
}

TEST(ParseDateCell, TextThatIsNoSuchDateIsRefused) {
  for (const char* text : {"20/06/2031",
                           "06/20/2031",
                           "20-06-2031",
                           "2031/06/20",
                           "2031-6-20",
                           "20 Jun 2031",
                           "2031-06-20T",
                           "2031-06-20T16",
                           "2031-06-20T16:0",
                           "2031-06-20T16:00:",
                           "2031-06-20Z",
                           "2031-06-20T16:00:00.",
                           "2031-06-20T16:00+",
                           "2031-06-20T16:00+5",
                           "2031-06-20 ",
                           " 2031-06-20",
                           "2031-06-20x",
                           "-031-06-20",
                           "2031-06-20T-1:00",
                           "nan",
                           "1e9",
                           "1939752000.5",
                           "-193975200"}) {
    EXPECT_FALSE(parse_date_cell(text)) << text;
  }
}

TEST(ParseDateCell, StatedFormatIsRead) {
  const std::pair<const char*, const char*> kCases[] = {
      {"20/06/2031", "%d/%m/%Y"}, {"6/20/31", "%m/%d/%y"},       {"20JUN31", "%d%b%y"},
      {"20062031", "%d%m%Y"},     {"Jun 20, 2031", "%b %d, %Y"}, {"100% 20310620", "100%% %Y%m%d"}};
  for (const auto& [text, format] : kCases) {
    const auto cell = parse_date_cell(text, format);
    ASSERT_TRUE(cell) << text;
    EXPECT_EQ(cell->date, 2031y / 6 / 20) << text;
    EXPECT_FALSE(cell->time_of_day) << text;
  }
}

TEST(ParseDateCell, StatedFormatMayHoldATime) {
  EXPECT_EQ(parse_date_cell("20.06.2031 9:05", "%d.%m.%Y %H:%M")->time_of_day, 9h + 5min);
  EXPECT_EQ(parse_date_cell("20310620-160059", "%Y%m%d-%H%M%S")->time_of_day, 16h + 59s);
}

TEST(ParseDateCell, StatedFormatIsTheOnlyOneRead) {
  EXPECT_FALSE(parse_date_cell("2031-06-20", "%d/%m/%Y"));
  EXPECT_FALSE(parse_date_cell("20/06/2031 ", "%d/%m/%Y"));
  EXPECT_FALSE(parse_date_cell("31/06/2031", "%d/%m/%Y"));
  EXPECT_FALSE(parse_date_cell("20/06/2031 25:00", "%d/%m/%Y %H:%M"));
  EXPECT_FALSE(parse_date_cell("20-Jux-2031", "%d-%b-%Y"));
  EXPECT_FALSE(parse_date_cell("20/06", "%d/%m"));
}

TEST(ParseDateCell, EveryMonthNameIsKnownInAnyCase) {
  const char* const kNames[] = {"jan", "FEB", "Mar", "apr", "MAY", "Jun",
                                "jul", "AUG", "Sep", "oct", "NOV", "Dec"};
  for (unsigned m = 1; m <= 12; ++m) {
    const auto cell = parse_date_cell(std::string("05") + kNames[m - 1] + "2031", "%d%b%Y");
    ASSERT_TRUE(cell) << kNames[m - 1];
    EXPECT_EQ(cell->date->month(), std::chrono::month{m});
  }
}

TEST(DateFormatProblem, CompleteFormatHasNone) {
  for (const char* format : {"%d/%m/%Y", "%d%b%y", "%Y-%m-%dT%H:%M:%S", "%d.%m.%y %H%%"}) {
    EXPECT_FALSE(date_format_problem(format)) << format;
  }
}

TEST(DateFormatProblem, IncompleteOrUnknownFormatIsRefused) {
  for (const char* format :
       {"", "%d/%m", "%m/%Y", "%d/%Y", "%d/%m/%Q", "%d/%m/%Y %", "%d/%m/%Y %M"}) {
    EXPECT_TRUE(date_format_problem(format)) << format;
  }
}

TEST(Resolve, DateAloneMeansTheDefaultTimeOfTheClock) {
  EXPECT_EQ(resolve(*parse_date_cell("2031-06-20"), kNewYork, 9h + 30min),
            utc(2031, 6, 20, 13h + 30min));
}

TEST(Resolve, StatedOffsetWinsOverTheClock) {
  EXPECT_EQ(resolve(*parse_date_cell("2031-06-20T16:00+02:00"), kNewYork, 9h),
            utc(2031, 6, 20, 14h));
}

TEST(Resolve, UnixSecondsNeedNoClock) {
  EXPECT_EQ(resolve(*parse_date_cell("1939752000"), kNewYork, 9h), Instant{1'939'752'000s});
}

TEST(ParseTimeOfDay, HoursMinutesAndSecondsAreRead) {
  EXPECT_EQ(parse_time_of_day("16:00"), seconds{16h});
  EXPECT_EQ(parse_time_of_day("9:30"), 9h + 30min);
  EXPECT_EQ(parse_time_of_day("09:30:15"), 9h + 30min + 15s);
  EXPECT_EQ(parse_time_of_day("00:00"), 0s);
}

TEST(ParseTimeOfDay, MalformedTextIsRefused) {
  for (const char* text :
       {"", "16", "1600", "24:00", "16:60", "16:00:60", "16:0", "16:00x", ":30", "-1:00"}) {
    EXPECT_FALSE(parse_time_of_day(text)) << text;
  }
}

TEST(ParseAsOf, DateAloneMeansSixteenHundredUtc) {
  const auto as_of = parse_as_of("2031-03-14", "");
  ASSERT_TRUE(as_of.ok());
  EXPECT_EQ(format_instant(as_of->clock, as_of->instant), "2031-03-14T16:00:00+00:00");
}

TEST(ParseAsOf, WrittenOffsetBecomesTheClock) {
  const auto as_of = parse_as_of("2031-03-14T16:00:00-05:00", "");
  ASSERT_TRUE(as_of.ok());
  EXPECT_EQ(as_of->instant, utc(2031, 3, 14, 21h));
  EXPECT_EQ(format_instant(as_of->clock, as_of->instant), "2031-03-14T16:00:00-05:00");
}

TEST(ParseAsOf, ConfiguredZoneIsTheClockAndTheOffsetStillCounts) {
  const auto date_only = parse_as_of("2031-03-14", "America/New_York");
  ASSERT_TRUE(date_only.ok());
  EXPECT_EQ(date_only->instant, utc(2031, 3, 14, 20h));
  const auto with_offset = parse_as_of("2031-03-14T16:00:00-05:00", "America/New_York");
  ASSERT_TRUE(with_offset.ok());
  EXPECT_EQ(with_offset->instant, utc(2031, 3, 14, 21h));
  EXPECT_EQ(offset_at(with_offset->clock, with_offset->instant), -4h);
}

TEST(ParseAsOf, AnythingElseIsAUsageFaultThatShowsTheForm) {
  for (const char* text : {"", "today", "14/03/2031", "2031-02-30", "1939752000", "203106200"}) {
    const auto as_of = parse_as_of(text, "");
    ASSERT_FALSE(as_of.ok()) << text;
    EXPECT_EQ(as_of.failure().fault, Fault::usage);
    EXPECT_NE(as_of.failure().text().find("2031-03-14T16:00:00-05:00"), std::string::npos);
  }
}

TEST(ParseAsOf, UnknownZoneIsAConfigurationFault) {
  const auto as_of = parse_as_of("2031-03-14", "Atlantis/Capital");
  ASSERT_FALSE(as_of.ok());
  EXPECT_EQ(as_of.failure().fault, Fault::configuration);
}

}  // namespace
}  // namespace duskgrid::quotes
