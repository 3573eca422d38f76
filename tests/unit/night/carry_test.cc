#include "night/carry.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

#include "arbitrage/certificate.h"
#include "market/day_count.h"
#include "market/dividends.h"
#include "surface/carry.h"

namespace duskgrid::night {
namespace {

using namespace std::chrono_literals;
using std::chrono::days;

const quotes::Clock kClock{"", std::chrono::minutes{-300}};
const quotes::Instant kFriday = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
// A few operations on numbers of order 100.
constexpr double kRounding = 1e-11;

publish::PastUnderlying friday() {
  publish::PastUnderlying past;
  past.record = {"HALYRD", publish::Status::published, true, 3, 30, 30, 0, "", ""};
  past.stored = publish::StoredSurface{{kFriday, kClock}, {"HALYRD", 100.0, {}}};
  for (const auto& [ahead, backbone] :
       {std::pair(days{3}, surface::SliceParameters{0.0005, -0.4, 0.03}),
        {days{35}, {0.0055, -0.4, 0.1}},
        {days{98}, {0.014, -0.35, 0.16}}}) {
    const double t = market::year_fraction(kFriday, kFriday + ahead);
    past.stored->surface.slices.push_back(
        {kFriday + ahead, t, 100 * std::exp(0.02 * t), std::exp(-0.03 * t), backbone, -0.3, 0.3});
  }
  return past;
}

MarkedUnderlying carried(const std::string& toml, const publish::PastUnderlying& past = friday(),
                         MarkedUnderlying marked = {}) {
  const auto config = parse_config(toml, "night.toml", "");
  EXPECT_TRUE(config.ok());
  const auto night = resolve(*config);
  EXPECT_TRUE(night.ok());
  marked.record.name = "HALYRD";
  carry(marked, past, *config, *night);
  return marked;
}

const std::string kMonday = "as_of = '2031-03-17T16:00:00-05:00'\n";

TEST(Carry, SurfaceStandsInWithItsAgeCertifiedAndInForwardsAndGrid) {
  const auto m = carried(kMonday);
  EXPECT_EQ(m.record.status, publish::Status::carried);
  EXPECT_EQ(m.record.carried_from, "2031-03-14T16:00:00-05:00");
  EXPECT_EQ(m.record.message, "carried from 2031-03-14T16:00:00-05:00, 1 business day old");
  ASSERT_TRUE(m.surface);
  // The expiry of Monday itself has passed.
  ASSERT_EQ(m.surface->slices.size(), 2U);
  EXPECT_EQ(m.record.slices, 2);
  EXPECT_TRUE(m.record.certified);
  EXPECT_TRUE(arbitrage::certify(*m.surface).certified);
  ASSERT_EQ(m.forwards.size(), 2U);
  for (const auto& row : m.forwards) EXPECT_EQ(row.estimate.source, market::ForwardSource::carried);
  ASSERT_FALSE(m.grid.empty());
  for (const auto& node : m.grid) EXPECT_EQ(node.support, publish::Support::carried);
}

TEST(Carry, VolatilityIsThatOfTheRemainingTime) {
  const auto past = friday();
  const auto m = carried(kMonday, past);
  ASSERT_TRUE(m.surface);
  for (const auto& s : m.surface->slices)
    for (const double k : {-0.1, 0.0, 0.05})
      EXPECT_NEAR(surface::vol_at(*m.surface, k, s.year_fraction),
                  surface::vol_at(past.stored->surface, k, s.year_fraction),
                  surface::kMostRestated);
}

TEST(Carry, WithoutASpotForwardsAreTheOldOnesAndDiscountsGrowOn) {
  const auto m = carried(kMonday);
  const auto old = friday().stored->surface;
  for (std::size_t i = 0; i < 2; ++i) {
    const auto& s = m.surface->slices[i];
    EXPECT_NEAR(s.forward, old.slices[i + 1].forward, kRounding);
    EXPECT_NEAR(s.discount_factor, std::exp(-0.03 * s.year_fraction), kRounding);
  }
}

TEST(Carry, SpotOfTonightGrowsAsTheOldForwardsDid) {
  const auto m = carried(kMonday + "[underlying.HALYRD]\nspot = 110\n");
  for (const auto& s : m.surface->slices)
    EXPECT_NEAR(s.forward, 110 * std::exp(0.02 * s.year_fraction), kRounding);
  EXPECT_EQ(m.surface->spot, 110);
}

TEST(Carry, StatedCarryAndRatesGiveTheForwardFromTheSpot) {
  const auto m =
      carried(kMonday + "rates = { '1Y' = 0.05 }\n[underlying.HALYRD]\nspot = 110\ncarry = 0.01\n");
  for (const auto& s : m.surface->slices) {
    EXPECT_NEAR(s.forward, 110 * std::exp(0.04 * s.year_fraction), kRounding);
    EXPECT_NEAR(s.discount_factor, std::exp(-0.05 * s.year_fraction), kRounding);
  }
  for (const auto& row : m.forwards) EXPECT_EQ(row.estimate.source, market::ForwardSource::curve);
}

// What goes ex between the two nights leaves spot and forward once, not the forward twice.
TEST(Carry, DividendGoneExSinceIsTakenOffOnce) {
  auto past = friday();
  const double kBorrow = 0.01, kRate = 0.03, kPaid = 5;
  const std::vector<market::Dividend> ahead{{0.5 / 365, market::DividendKind::cash, kPaid}};
  for (auto& s : past.stored->surface.slices)
    s.forward = market::forward_of({100, kRate, kBorrow, s.year_fraction}, ahead);
  const auto m = carried(kMonday +
                             "[underlying.HALYRD]\nspot = 95\n"
                             "dividends = {'2031-03-15T04:00:00-05:00' = 5}\n",
                         past);
  ASSERT_EQ(m.forwards.size(), 2U);
  for (const auto& row : m.forwards)
    // The old borrow is found to 1e-10 of the old forward.
    EXPECT_NEAR(row.estimate.forward, 95 * std::exp((kRate - kBorrow) * row.year_fraction), 1e-7);
}

TEST(Carry, StatedForwardsAndThoseOfTonightsQuotesComeFirst) {
  MarkedUnderlying marked;
  const auto late = kFriday + days{98};
  market::ForwardEstimate parity{};
  parity.forward = 123;
  parity.discount_factor = 0.991;
  parity.pairs = 7;
  marked.forwards.push_back({late, market::year_fraction(kFriday + days{3}, late), parity});
  const auto m =
      carried(kMonday + "[underlying.HALYRD]\nspot = 110\nforwards = { '2031-04-18' = 105.5 }\n",
              friday(), marked);
  EXPECT_EQ(m.surface->slices[0].forward, 105.5);
  EXPECT_EQ(m.surface->slices[1].forward, 123);
  EXPECT_EQ(m.surface->slices[1].discount_factor, 0.991);
  ASSERT_EQ(m.forwards.size(), 2U);
  EXPECT_EQ(m.forwards[0].estimate.source, market::ForwardSource::given);
  EXPECT_EQ(m.forwards[1].estimate.source, market::ForwardSource::parity);
  EXPECT_EQ(m.forwards[1].estimate.pairs, 7);
}

TEST(Carry, AgeIsInBusinessDaysAndTooOldIsRefused) {
  const std::string late = "as_of = '2031-03-24T16:00:00-05:00'\n";  // 6 business days on
  const auto refused = carried(late);
  EXPECT_EQ(refused.record.status, publish::Status::refused);
  EXPECT_FALSE(refused.surface);
  EXPECT_NE(refused.record.message.find("6 business days old, at most 5"), std::string::npos)
      << refused.record.message;
  const auto holiday = carried(late + "holidays = ['2031-03-18']\n");
  EXPECT_EQ(holiday.record.status, publish::Status::carried);
  EXPECT_NE(holiday.record.message.find("5 business days old"), std::string::npos);
  EXPECT_EQ(carried(late + "[carry]\nmost_business_days = 6\n").record.status,
            publish::Status::carried);
}

TEST(Carry, SurfaceThatWasItselfCarriedCountsFromItsQuotes) {
  auto past = friday();
  past.record.status = publish::Status::carried;
  past.record.carried_from = "2031-03-12T16:00:00-05:00";
  const auto m = carried(kMonday, past);
  EXPECT_EQ(m.record.carried_from, past.record.carried_from);
  EXPECT_NE(m.record.message.find("3 business days old"), std::string::npos) << m.record.message;
}

TEST(Carry, SurfaceWhoseExpiriesHavePassedIsRefused) {
  auto past = friday();
  past.stored->surface.slices.resize(1);
  const auto m = carried(kMonday, past);
  EXPECT_EQ(m.record.status, publish::Status::refused);
  EXPECT_NE(m.record.message.find("has passed"), std::string::npos) << m.record.message;
}

TEST(Carry, SurfaceThatCannotBeProvedIsRefusedWithTheReasonForTheNight) {
  auto past = friday();
  past.stored->surface.slices[2].backbone.theta = 1e-5;  // below the expiry before it
  MarkedUnderlying marked;
  marked.record.message = "no usable quote: no-bid 34";
  const auto m = carried(kMonday, past, marked);
  EXPECT_EQ(m.record.status, publish::Status::refused);
  EXPECT_FALSE(m.surface);
  EXPECT_NE(m.record.message.find("not proved"), std::string::npos) << m.record.message;
  EXPECT_NE(m.record.message.find("no-bid 34"), std::string::npos) << m.record.message;
}

TEST(CarryAll, NamesAreAddedInOrderAndMarkedOnesAreLeftAlone) {
  publish::PastRun previous;
  for (const char* name : {"A", "C", "E", "F"}) {
    previous.underlyings[name] = friday();
    previous.underlyings[name].stored->surface.underlying = name;
  }
  previous.underlyings["F"].stored.reset();  // had no surface either
  const auto marked = [] {
    std::vector<MarkedUnderlying> out(3);
    out[0].record.name = "B";
    out[1].record.name = "C";
    out[2].record.name = "D";
    out[2].surface = friday().stored->surface;
    return out;
  };
  const auto names = [&](const std::string& more) {
    const auto config = parse_config(kMonday + more, "night.toml", "");
    auto all = marked();
    carry_all(all, previous, *config, *resolve(*config));
    std::string out;
    for (const auto& m : all)
      out += m.record.name + (m.record.status == publish::Status::carried ? "+ " : " ");
    return out;
  };
  EXPECT_EQ(names(""), "A+ B C+ D E+ ");
  EXPECT_EQ(names("[carry]\nmost_business_days = 0\n"), "B C D ");
}

}  // namespace
}  // namespace duskgrid::night
