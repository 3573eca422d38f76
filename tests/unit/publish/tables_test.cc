#include "publish/tables.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;

const quotes::Instant kAsOf = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
const quotes::Instant kExpiry = std::chrono::sys_days{std::chrono::year{2031} / 6 / 20} + 21h;
const quotes::Clock kClock{"", std::chrono::minutes{-300}};

// The cells of one CSV line, quoting taken off (RFC 4180); the line must end in one line feed.
std::vector<std::string> cells_of(std::string_view line) {
  EXPECT_TRUE(line.ends_with('\n'));
  std::vector<std::string> cells(1);
  bool quoted = false;
  for (const char c : line.substr(0, line.size() - 1)) {
    if (c == '"')
      quoted = !quoted;
    else if (c == ',' && !quoted)
      cells.emplace_back();
    else
      cells.back() += c;
  }
  EXPECT_FALSE(quoted);
  return cells;
}

// The cell of a line under a header of its table.
std::string cell(std::string_view header, const std::string& line, std::string_view column) {
  const auto names = cells_of(header);
  const auto cells = cells_of(line);
  EXPECT_EQ(cells.size(), names.size()) << line;
  const auto at = std::find(names.begin(), names.end(), column) - names.begin();
  return static_cast<std::size_t>(at) < cells.size() ? cells[static_cast<std::size_t>(at)]
                                                     : "no such column";
}

GridNode made_node() {
  return {kExpiry, "", 0.25, 101.5, 0.99, 0.9, 91.35, 0.225, Support::observed};
}

std::string line_of(const GridNode& node, const std::string& name = "HALYRD") {
  InstantTexts instants(kClock);
  return grid_line(node, Axis::moneyness, name, kAsOf, instants);
}

TEST(GridLine, EveryColumnHasItsCell) {
  EXPECT_EQ(line_of(made_node()),
            "2031-03-14T16:00:00-05:00,HALYRD,2031-06-20T16:00:00-05:00,,0.25,101.5,0.99,moneyness,"
            "0.9,91.35,0.225,,,observed\n");
  EXPECT_EQ(cells_of(line_of(made_node())).size(), cells_of(kGridHeader).size());
}

TEST(GridLine, TenorIsNamed) {
  auto node = made_node();
  node.tenor = "3M";
  EXPECT_EQ(cell(kGridHeader, line_of(node), "tenor"), "3M");
}

TEST(GridLine, NamesAreQuotedAndGuarded) {
  const auto line = line_of(made_node(), "=A,B");
  EXPECT_EQ(cell(kGridHeader, line, "underlying"), "'=A,B");
  EXPECT_EQ(cell(kGridHeader, line, "support"), "observed");
}

class LedgerLineTest : public testing::Test {
 protected:
  LedgerLineTest() {
    table_.files = {"a.csv"};
    table_.underlyings = {"HALYRD"};
    table_.notes = {"5 cells, header has 6"};
    quote_.file = 0;
    quote_.line = 7;
    quote_.underlying = 0;
    quote_.expiry = kExpiry;
    quote_.strike = 95;
    quote_.bid = 1.5;
    quote_.ask = 1.75;
  }
  std::string line() {
    InstantTexts instants(kClock);
    return ledger_line(quote_, table_, instants);
  }
  std::string cell_of(std::string_view column) { return cell(kLedgerHeader, line(), column); }

  quotes::QuoteTable table_;
  quotes::Quote quote_;
};

TEST_F(LedgerLineTest, UsedQuoteHasEveryCellButReasonAndNote) {
  quote_.vol_bid = 0.2;
  quote_.vol_ask = 0.25;
  quote_.vol_fit = 0.3;
  quote_.miss = 2;
  EXPECT_EQ(line(),
            "a.csv,7,HALYRD,2031-06-20T16:00:00-05:00,95,C,european,price,1.5,1.75,used,,,"
            "0.2,0.25,0.3,2\n");
}

TEST_F(LedgerLineTest, UnreadableRowHasEmptyContractCells) {
  quote_.reason = quotes::Reason::unreadable;
  quote_.note = 0;
  EXPECT_EQ(line(), "a.csv,7,,,,,,,,,dropped,unreadable,\"5 cells, header has 6\",,,,\n");
}

TEST_F(LedgerLineTest, UnreadableRowWithoutAnyNameIsALine) {
  quote_ = {};
  quote_.file = 0;
  quote_.line = 3;
  quote_.reason = quotes::Reason::unreadable;
  EXPECT_EQ(line(), "a.csv,3,,,,,,,,,dropped,unreadable,,,,,\n");
}

TEST_F(LedgerLineTest, EveryReasonIsALineOfAllColumns) {
  for (const auto& entry : quotes::reasons()) {
    quote_.reason = entry.reason;
    EXPECT_EQ(cells_of(line()).size(), cells_of(kLedgerHeader).size()) << entry.word;
    EXPECT_EQ(cell_of("reason"), entry.word);
    EXPECT_EQ(cell_of("state"), quotes::word(entry.state));
  }
}

TEST_F(LedgerLineTest, WordsTellSidesStylesAndUnits) {
  quote_.put_call = quotes::PutCall::put;
  quote_.exercise = quotes::Exercise::american;
  quote_.quoted_in = quotes::QuotedIn::vol;
  EXPECT_EQ(cell_of("put_call"), "P");
  EXPECT_EQ(cell_of("exercise"), "american");
  EXPECT_EQ(cell_of("quoted_in"), "vol");
}

TEST_F(LedgerLineTest, AbsentSideIsEmptyAndNegativeOneANumber) {
  quote_.bid = quotes::kAbsent;
  quote_.ask = -1;
  EXPECT_EQ(cell_of("bid"), "");
  EXPECT_EQ(cell_of("ask"), "-1");
}

TEST_F(LedgerLineTest, FileNamesAreGuarded) {
  table_.files = {"-a.csv"};
  EXPECT_EQ(cell_of("file"), "'-a.csv");
}

ForwardRow made_forward() {
  market::ForwardEstimate estimate{};
  estimate.forward = 101.5;
  estimate.discount_factor = 0.99;
  estimate.zero_rate = 0.04;
  estimate.pairs = 9;
  estimate.breaks = 1;
  return {kExpiry, 0.25, estimate};
}

TEST(ForwardsLine, EveryColumnHasItsCell) {
  auto row = made_forward();
  row.estimate.carry = -0.01;
  EXPECT_EQ(forwards_line(row, "HALYRD", kClock),
            "HALYRD,2031-06-20T16:00:00-05:00,0.25,101.5,0.99,0.04,-0.01,9,1,parity\n");
  EXPECT_EQ(cells_of(forwards_line(row, "HALYRD", kClock)).size(),
            cells_of(kForwardsHeader).size());
}

TEST(ForwardsLine, CarryWithoutASpotIsEmpty) {
  const auto line = forwards_line(made_forward(), "HALYRD", kClock);
  EXPECT_EQ(cell(kForwardsHeader, line, "carry"), "");
}

TEST(FinancingLine, EveryColumnHasItsCell) {
  const FinancingRow row{kExpiry, ExerciseTaken::american, 101, Origin::rows,
                         0.04,    Origin::given,           2,   -0.85,
                         0.012,   Origin::inferred};
  EXPECT_EQ(
      financing_line(row, "HALYRD", kClock),
      "HALYRD,2031-06-20T16:00:00-05:00,american,101,rows,0.04,given,2,-0.85,0.012,inferred\n");
  EXPECT_EQ(cells_of(financing_line(row, "HALYRD", kClock)).size(),
            cells_of(kFinancingHeader).size());
}

TEST(FinancingLine, WhatIsNotKnownIsEmpty) {
  const auto line = financing_line({kExpiry, ExerciseTaken::american_as_european}, "=1+1", kClock);
  EXPECT_EQ(line, "'=1+1,2031-06-20T16:00:00-05:00,american-as-european,,,,,0,,,\n");
}

arbitrage::Violation made_violation(std::vector<double> strikes) {
  return {arbitrage::Scope::quotes,
          arbitrage::Kind::vertical,
          kExpiry,
          quotes::kNoInstant,
          std::move(strikes),
          0.5,
          1.25,
          quotes::kAbsent,
          {{1, arbitrage::LegType::call, 95, kExpiry, 6},
           {-1, arbitrage::LegType::call, 100, kExpiry, 6.5}}};
}

TEST(ViolationsLine, EveryColumnHasItsCellForOneToThreeStrikes) {
  for (const std::vector<double>& strikes : {std::vector<double>{95}, {95, 100}, {95, 100, 105}}) {
    const auto line = violations_line(made_violation(strikes), "HALYRD", kClock);
    EXPECT_EQ(cells_of(line).size(), cells_of(kViolationsHeader).size());
    EXPECT_EQ(cell(kViolationsHeader, line, "strike_1"), "95");
    EXPECT_EQ(cell(kViolationsHeader, line, "strike_2"), strikes.size() > 1 ? "100" : "");
    EXPECT_EQ(cell(kViolationsHeader, line, "strike_3"), strikes.size() > 2 ? "105" : "");
    EXPECT_EQ(cell(kViolationsHeader, line, "amount"), "0.5");
    EXPECT_EQ(cell(kViolationsHeader, line, "vol_points"), "1.25");
    EXPECT_EQ(cell(kViolationsHeader, line, "half_spreads"), "");
  }
}

TEST(ViolationsLine, LegsAreGuardedAndSecondExpiryIsOfCalendarsOnly) {
  auto violation = made_violation({95, 100});
  EXPECT_EQ(cell(kViolationsHeader, violations_line(violation, "HALYRD", kClock), "expiry_2"), "");
  violation.expiry_2 = kExpiry + 24h;
  const auto line = violations_line(violation, "HALYRD", kClock);
  EXPECT_EQ(cell(kViolationsHeader, line, "expiry_2"), "2031-06-21T16:00:00-05:00");
  EXPECT_TRUE(cell(kViolationsHeader, line, "legs").starts_with("'+1 C 95 2031-06-20 @6; -1 C 100"))
      << line;
}

const ValueTime kTime{kExpiry, "3M", 0.25, {101.5, 0.99}};

TEST(ValuesLine, EveryNumberStandsUnderItsHeader) {
  InstantTexts instants(kClock);
  const surface::Derived derived{95, 0.2, quotes::PutCall::put, 1.5, {-0.25, 0.03, 9.5}, 0.02, 0.3};
  const auto line = values_line(kTime, {95, -0.0625, derived, Support::interpolated}, instants);
  EXPECT_EQ(line,
            "2031-06-20T16:00:00-05:00,3M,0.25,101.5,0.99,95,-0.0625,0.2,P,1.5,-0.25,0.03,9.5,"
            "0.02,0.3,interpolated\n");
  EXPECT_EQ(cells_of(line).size(), cells_of(kValuesHeader).size());
  EXPECT_EQ(cell(kValuesHeader, line, "vega"), "9.5");
  EXPECT_EQ(cell(kValuesHeader, line, "local_vol"), "0.3");
}

TEST(ValuesLine, NumbersThatDoNotExistAreEmptyCells) {
  InstantTexts instants(kClock);
  surface::Derived derived{95, 0.2, quotes::PutCall::call, 1.5, {0.25, 0.03, 9.5}, {}, {}};
  const auto line = values_line(kTime, {95, -0.0625, derived, Support::interpolated}, instants);
  EXPECT_TRUE(line.ends_with(",9.5,,,interpolated\n")) << line;
  const auto bare = values_line(kTime, {INFINITY, 800, {}, Support::extrapolated}, instants);
  EXPECT_EQ(cells_of(bare).size(), cells_of(kValuesHeader).size());
  EXPECT_TRUE(bare.ends_with(",0.99,,800,,,,,,,,,extrapolated\n")) << bare;
}

TEST(SwapsLine, AStrikeThatDoesNotExistIsAnEmptyCell) {
  InstantTexts instants(kClock);
  const auto line = swaps_line(kTime, 0.2, surface::VarianceSwap{0.0625, 0.25}, instants);
  EXPECT_EQ(line, "2031-06-20T16:00:00-05:00,3M,0.25,101.5,0.99,0.2,0.25,0.0625\n");
  EXPECT_EQ(cells_of(line).size(), cells_of(kSwapsHeader).size());
  EXPECT_EQ(swaps_line(kTime, 0.2, {}, instants),
            "2031-06-20T16:00:00-05:00,3M,0.25,101.5,0.99,0.2,,\n");
}

TEST(InstantTexts, EachInstantHasItsOwnTextHoweverOftenAsked) {
  InstantTexts instants(kClock);
  for (int round = 0; round < 2; ++round) {
    EXPECT_EQ(instants.of(kAsOf), "2031-03-14T16:00:00-05:00");
    EXPECT_EQ(instants.of(kExpiry), "2031-06-20T16:00:00-05:00");
    EXPECT_EQ(instants.of(quotes::kNoInstant), "");
  }
}

}  // namespace
}  // namespace duskgrid::publish
