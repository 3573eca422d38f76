#include "arbitrage/violation.h"

#include <gtest/gtest.h>

namespace duskgrid::arbitrage {
namespace {

using namespace std::chrono;

const quotes::Instant kExpiry = sys_days{2031y / June / 20} + 20h;
const quotes::Clock kFourWest{"", minutes{-240}};

TEST(FormatLegs, BuysArePlusSellsMinusInTheOrderGiven) {
  const std::vector<Leg> legs{{0.4, LegType::call, 95, kExpiry, 6.10},
                              {-1, LegType::call, 100, kExpiry, 3.90},
                              {0.6, LegType::put, 102.5, kExpiry, 2}};
  EXPECT_EQ(format_legs(legs, kFourWest),
            "+0.4 C 95 2031-06-20 @6.1; -1 C 100 2031-06-20 @3.9; +0.6 P 102.5 2031-06-20 @2");
}

TEST(FormatLegs, ForwardShowsThePriceAgreed) {
  EXPECT_EQ(format_legs({{-1, LegType::forward, 4012.25, kExpiry, 0}}, kFourWest),
            "-1 F 2031-06-20 @4012.25");
}

TEST(FormatLegs, DateIsTheClocksLocalOne) {
  const quotes::Instant late = sys_days{2031y / June / 21} + 1h;
  EXPECT_EQ(format_legs({{1, LegType::put, 50, late, 1}}, kFourWest), "+1 P 50 2031-06-20 @1");
  EXPECT_EQ(format_legs({{1, LegType::put, 50, late, 1}}, {}), "+1 P 50 2031-06-21 @1");
}

TEST(FormatLegs, YearFractionStandsInForNoExpiry) {
  const Leg leg{-1, LegType::call, 100, quotes::kNoInstant, 11.92, 0, 0.25};
  const Leg forward{1, LegType::forward, 101, quotes::kNoInstant, 0, 0, 0.25};
  EXPECT_EQ(format_legs({leg, forward}, {}), "-1 C 100 t=0.25 @11.92; +1 F t=0.25 @101");
}

TEST(FormatLegs, NoLegsIsEmpty) { EXPECT_EQ(format_legs({}, {}), ""); }

TEST(ViolationWords, AreThoseOfTheFile) {
  const std::pair<Kind, std::string_view> kinds[] = {
      {Kind::bounds, "bounds"},     {Kind::vertical, "vertical"}, {Kind::butterfly, "butterfly"},
      {Kind::calendar, "calendar"}, {Kind::parity, "parity"},     {Kind::box, "box"},
      {Kind::wing, "wing"}};
  for (const auto& [kind, text] : kinds) EXPECT_EQ(word(kind), text);
  EXPECT_EQ(word(Scope::quotes), "quotes");
  EXPECT_EQ(word(Scope::surface), "surface");
}

}  // namespace
}  // namespace duskgrid::arbitrage
