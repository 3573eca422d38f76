#include "market/dividends.h"

#include <gtest/gtest.h>

#include <cmath>

namespace duskgrid::market {
namespace {

using namespace std::chrono_literals;

// A few exponentials and products of numbers of the forward's size.
constexpr double kRounding = 1e-13;

Dividend cash(double time, double amount) { return {time, DividendKind::cash, amount}; }
Dividend share(double time, double amount) { return {time, DividendKind::proportional, amount}; }

// J. Hull, "Options, Futures, and Other Derivatives", forward on a stock of 50 over ten months at 8
// % that pays 0.75 after 3, 6 and 9 months: 51.14 (from memory; printed to the cent).
TEST(ForwardOf, HandbookStockWithThreeDividends) {
  const std::vector<Dividend> dividends{cash(0.25, 0.75), cash(0.5, 0.75), cash(0.75, 0.75)};
  EXPECT_NEAR(forward_of({50, 0.08, 0, 10.0 / 12}, dividends), 51.14, 0.005);
}

TEST(ForwardOf, WithoutDividendsIsGrowthOfTheSpot) {
  EXPECT_NEAR(forward_of({80, 0.03, 0.01, 2}, {}), 80 * std::exp(0.04), 80 * kRounding);
}

TEST(ForwardOf, CashIsCarriedToExpiryAtRateLessBorrow) {
  const double want = 100 * std::exp(0.04 - 0.01) - 2 * std::exp((0.04 - 0.01) * 0.75);
  EXPECT_NEAR(forward_of({100, 0.04, 0.01, 1}, std::vector{cash(0.25, 2)}), want, 100 * kRounding);
}

TEST(ForwardOf, ShareOfTheSpotTakesItsPartAndOfEarlierCashToo) {
  const std::vector<Dividend> dividends{cash(0.25, 2), share(0.5, 0.1)};
  EXPECT_NEAR(forward_of({100, 0, 0, 1}, dividends), (100 - 2) * 0.9, 100 * kRounding);
}

TEST(ForwardOf, DividendsAtOrAfterExpiryAndBeforeNowHaveNoEffect) {
  const std::vector<Dividend> dividends{cash(-0.1, 5), cash(1, 5), cash(1.5, 5)};
  EXPECT_NEAR(forward_of({100, 0, 0, 1}, dividends), 100, 100 * kRounding);
}

TEST(BorrowOf, GivesTheForwardBack) {
  const std::vector<Dividend> dividends{cash(0.2, 1.5), share(0.6, 0.01), cash(1.1, 1.5)};
  for (const double borrow : {-0.02, 0.0, 0.004, 0.35, 2.0}) {
    const Financing made{100, 0.05, borrow, 1.25};
    const auto found = borrow_of(forward_of(made, dividends), made, dividends);
    ASSERT_TRUE(found) << borrow;
    // The forward to 1e-10 of itself, over the time.
    EXPECT_NEAR(*found, borrow, 1e-10) << borrow;
  }
}

TEST(BorrowOf, ForwardOfADayIsFoundToo) {
  const Financing made{100, 0.05, 0.2, 1.0 / 365};
  const auto found = borrow_of(forward_of(made, {}), made, {});
  ASSERT_TRUE(found);
  EXPECT_NEAR(*found, 0.2, 1e-10);
}

TEST(BorrowOf, NothingWhereNoBorrowWithinReasonGivesTheForward) {
  EXPECT_FALSE(borrow_of(1e-9, {100, 0.05, 0, 1}, {}));
  EXPECT_FALSE(borrow_of(-1, {100, 0.05, 0, 1}, {}));
  EXPECT_FALSE(borrow_of(std::nan(""), {100, 0.05, 0, 1}, {}));
}

TEST(ForwardOf, DividendsWorthMoreThanTheSpotLeaveNone) {
  EXPECT_LE(forward_of({1, 0, 0, 1}, std::vector{cash(0.5, 2)}), 0);
}

TEST(DividendsAfter, AreThoseStillAheadInTheirOrder) {
  const quotes::Instant now = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
  const std::vector<DatedDividend> dated{{now + 48h, DividendKind::cash, 2},
                                         {now, DividendKind::cash, 9},
                                         {now + 24h, DividendKind::proportional, 0.01},
                                         {now - 24h, DividendKind::cash, 9}};
  const auto ahead = dividends_after(now, dated);
  ASSERT_EQ(ahead.size(), 2u);
  EXPECT_EQ(ahead[0].kind, DividendKind::proportional);
  EXPECT_DOUBLE_EQ(ahead[0].time, 1.0 / 365);
  EXPECT_EQ(ahead[1].amount, 2);
  EXPECT_EQ(count_before(ahead, 1.5 / 365), 1u);
}

}  // namespace
}  // namespace duskgrid::market
