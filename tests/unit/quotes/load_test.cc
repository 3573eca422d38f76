#include "quotes/load.h"

#include <gtest/gtest.h>
#include <unistd.h>

#include <algorithm>
#include <boost/iostreams/device/back_inserter.hpp>
#include <boost/iostreams/filter/gzip.hpp>
#include <boost/iostreams/filtering_stream.hpp>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <string>
#include <string_view>
#include <vector>

namespace duskgrid::quotes {
namespace {

using std::chrono::hours;
using std::chrono::minutes;
using std::chrono::sys_days;
using std::chrono::year;
using namespace std::string_literals;

constexpr std::string_view kHeader = "underlying,expiry,strike,put_call,bid,ask\n";

Instant at(int y, unsigned m, unsigned d, int hour = 16, int minute = 0) {
  return sys_days{year{y} / static_cast<int>(m) / static_cast<int>(d)} + hours{hour} +
         minutes{minute};
}

class LoadQuotesTest : public testing::Test {
 protected:
  void SetUp() override {
    const auto* info = testing::UnitTest::GetInstance()->current_test_info();
    folder_ = testing::TempDir() + "load_test_" + std::to_string(::getpid()) + info->name() + "/";
    std::filesystem::remove_all(folder_);
    std::filesystem::create_directories(folder_);
    options_.files = {folder_ + "a.csv"};
  }
  void TearDown() override { std::filesystem::remove_all(folder_); }

  void write(const std::string& text, const std::string& name = "a.csv") {
    std::ofstream(folder_ + name, std::ios::binary) << text;
  }
  Result<LoadedQuotes> load() { return load_quotes({options_}, rules_); }

  LoadedQuotes loaded(const std::string& text) {
    write(text);
    auto result = load();
    if (!result) {
      ADD_FAILURE() << result.failure().text();
      return {};
    }
    return std::move(result.value());
  }
  LoadedQuotes loaded_rows(const std::string& rows) { return loaded(std::string(kHeader) + rows); }

  Failure failed(const std::string& text) {
    write(text);
    const auto result = load();
    if (!result) return result.failure();
    ADD_FAILURE() << "loaded, but a failure was due";
    return {};
  }

  static std::string note(const LoadedQuotes& loaded, std::size_t i = 0) {
    const Quote& quote = loaded.table.quotes.at(i);
    return quote.note < 0 ? "" : loaded.table.notes.at(static_cast<std::size_t>(quote.note));
  }

  std::string folder_;
  SourceOptions options_;
  TimeRules rules_;
};

TEST_F(LoadQuotesTest, ContractPerRowIsReadFieldByField) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,bid,ask,bid_size,ask_size,volume,open_interest,quote_time,"
      "underlying_price,exercise,multiplier\n"
      "HALYRD,2031-06-20,95,P,1.5,1.7,10,20,30,40,2031-03-14 15:59:00,101.25,American,100\n");
  ASSERT_EQ(read.table.quotes.size(), 1U);
  const Quote& q = read.table.quotes[0];
  EXPECT_EQ(read.table.underlyings, std::vector<std::string>{"HALYRD"});
  EXPECT_EQ(read.table.files, options_.files);
  EXPECT_EQ(q.file, 0);
  EXPECT_EQ(q.line, 2);
  EXPECT_EQ(q.underlying, 0);
  EXPECT_EQ(q.put_call, PutCall::put);
  EXPECT_EQ(q.exercise, Exercise::american);
  EXPECT_EQ(q.quoted_in, QuotedIn::price);
  EXPECT_EQ(q.reason, Reason::none);
  EXPECT_EQ(q.note, -1);
  EXPECT_EQ(q.expiry, at(2031, 6, 20));
  EXPECT_EQ(q.quote_time, at(2031, 3, 14, 15, 59));
  EXPECT_EQ(q.strike, 95);
  EXPECT_EQ(q.bid, 1.5);
  EXPECT_EQ(q.ask, 1.7);
  EXPECT_EQ(q.bid_size, 10);
  EXPECT_EQ(q.ask_size, 20);
  EXPECT_EQ(q.volume, 30);
  EXPECT_EQ(q.open_interest, 40);
  EXPECT_EQ(q.underlying_price, 101.25);
  EXPECT_EQ(q.multiplier, 100);
}

TEST_F(LoadQuotesTest, CallPutRowBecomesACallThenAPut) {
  const LoadedQuotes read = loaded(
      "underlying;expiry;strike;call_bid;call_ask;put_bid;put_ask\n"
      "HALYRD;20310620;100;5;5.2;4;4.3\n");
  ASSERT_EQ(read.table.quotes.size(), 2U);
  EXPECT_EQ(read.table.quotes[0].put_call, PutCall::call);
  EXPECT_EQ(read.table.quotes[0].ask, 5.2);
  EXPECT_EQ(read.table.quotes[1].put_call, PutCall::put);
  EXPECT_EQ(read.table.quotes[1].ask, 4.3);
  EXPECT_EQ(read.table.quotes[1].strike, 100);
  EXPECT_EQ(read.table.quotes[1].line, 2);
  EXPECT_EQ(read.files[0].rows, 1);
  EXPECT_EQ(read.files[0].contracts, 2);
  EXPECT_EQ(read.files[0].delimiter, ';');
}

TEST_F(LoadQuotesTest, BadCallPutRowIsTwoUnreadableContracts) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,call_bid,call_ask,put_bid,put_ask\n"
      "HALYRD,20310620,x,5,5.2,4,4.3\n");
  EXPECT_EQ(read.table.quotes.size(), 2U);
  EXPECT_EQ(read.files[0].unreadable, 2);
}

TEST_F(LoadQuotesTest, BadSideOfACallPutRowLeavesTheOther) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,call_bid,call_ask,put_bid,put_ask\n"
      "HALYRD,20310620,100,5,x,4,4.3\n");
  EXPECT_EQ(read.files[0].unreadable, 1);
  EXPECT_EQ(read.table.quotes[0].reason, Reason::unreadable);
  EXPECT_EQ(read.table.quotes[1].reason, Reason::none);
}

TEST_F(LoadQuotesTest, UnreadableRowsKeepLineAndNoteAndNothingElse) {
  const struct {
    const char* row;
    const char* note;
  } kCases[] = {
      {"HALYRD,2031-06-20,95,P,1.5", "5 cells, header has 6"},
      {"HALYRD,2031-06-20,95,P,1.5,1.7,", "7 cells, header has 6"},
      {",2031-06-20,95,P,1.5,1.7", "no underlying"},
      {"HALYRD,2031-02-30,95,P,1.5,1.7", "expiry is not a date"},
      {"HALYRD,06/07/2031,95,P,1.5,1.7", "expiry is not a date"},
      {"HALYRD,NA,95,P,1.5,1.7", "no expiry"},
      {"HALYRD,2031-06-20,-,P,1.5,1.7", "no strike"},
      {"HALYRD,2031-06-20,x,P,1.5,1.7", "strike is not a number"},
      {"HALYRD,2031-06-20,1e999,P,1.5,1.7", "strike is not a number"},
      {"HALYRD,2031-06-20,0,P,1.5,1.7", "strike is not above zero"},
      {"HALYRD,2031-06-20,-5,P,1.5,1.7", "strike is not above zero"},
      {"HALYRD,2031-06-20,95,,1.5,1.7", "no put or call"},
      {"HALYRD,2031-06-20,95,X,1.5,1.7", "neither put nor call"},
      {"HALYRD,2031-06-20,95,P,$1.5,1.7", "bid is not a number"},
      {"HALYRD,2031-06-20,95,P,1.5,inf", "ask is not a number"},
  };
  for (const auto& c : kCases) {
    const LoadedQuotes read =
        loaded_rows("KELPWK,2031-06-20,95,C,1,2\n" + std::string(c.row) + "\n");
    ASSERT_EQ(read.table.quotes.size(), 2U) << c.row;
    const Quote& q = read.table.quotes[1];
    EXPECT_EQ(q.reason, Reason::unreadable) << c.row;
    EXPECT_EQ(note(read, 1), c.note) << c.row;
    EXPECT_EQ(q.file, 0);
    EXPECT_EQ(q.line, 3);
    EXPECT_EQ(q.underlying, -1);
    EXPECT_TRUE(std::isnan(q.strike));
    EXPECT_EQ(q.expiry, kNoInstant);
    EXPECT_EQ(read.files[0].unreadable, 1);
    EXPECT_EQ(read.table.quotes[0].reason, Reason::none);
  }
}

TEST_F(LoadQuotesTest, NamesTooLongOrWithControlCharactersAreUnreadable) {
  const LoadedQuotes read = loaded_rows(std::string(81, 'A') + ",2031-06-20,95,C,1,2\n" +
                                        "\"A\nB\",2031-06-20,95,C,1,2\n" + std::string(80, 'A') +
                                        ",2031-06-20,95,C,1,2\n");
  ASSERT_EQ(read.table.quotes.size(), 3U);
  EXPECT_EQ(read.table.quotes[0].reason, Reason::unreadable);
  EXPECT_EQ(read.table.quotes[1].reason, Reason::unreadable);
  EXPECT_EQ(read.table.quotes[2].reason, Reason::none);
  EXPECT_EQ(read.table.quotes[2].line, 5);
}

TEST_F(LoadQuotesTest, NullBidOrAskIsAbsentNotUnreadable) {
  const LoadedQuotes read = loaded_rows(
      "HALYRD,2031-06-20,95,P,,1.7\n"
      "HALYRD,2031-06-20,95,P,-,n/a\n");
  EXPECT_TRUE(std::isnan(read.table.quotes[0].bid));
  EXPECT_EQ(read.table.quotes[0].ask, 1.7);
  EXPECT_TRUE(std::isnan(read.table.quotes[1].ask));
  EXPECT_EQ(read.files[0].unreadable, 0);
}

TEST_F(LoadQuotesTest, NegativeBidIsDataForTheCleaningToJudge) {
  const LoadedQuotes read = loaded_rows("HALYRD,2031-06-20,95,P,-0.5,1.7\n");
  EXPECT_EQ(read.table.quotes[0].bid, -0.5);
  EXPECT_EQ(read.table.quotes[0].reason, Reason::none);
}

TEST_F(LoadQuotesTest, UnneededNumbersThatCannotBeReadAreAbsent) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,bid,ask,volume,quote_time\n"
      "HALYRD,2031-06-20,95,P,1,2,lots,15:59\n");
  EXPECT_EQ(read.table.quotes[0].reason, Reason::none);
  EXPECT_TRUE(std::isnan(read.table.quotes[0].volume));
  EXPECT_EQ(read.table.quotes[0].quote_time, kNoInstant);
}

TEST_F(LoadQuotesTest, QuotedCellMayHoldLineFeedsAndKeepsItsFirstLine) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,bid,ask,remark\n"
      "HALYRD,2031-06-20,95,P,1,2,\"two\nlines, and a comma\"\n"
      "HALYRD,2031-06-20,96,P,1,2,\n");
  ASSERT_EQ(read.table.quotes.size(), 2U);
  EXPECT_EQ(read.files[0].unreadable, 0);
  EXPECT_EQ(read.table.quotes[0].line, 2);
  EXPECT_EQ(read.table.quotes[1].line, 4);
}

// Two strays in the same column once made one row of all between them, with the right
// number of cells.
TEST_F(LoadQuotesTest, StrayQuotationMarksCostTheirOwnRowsOnly) {
  const std::string sound = "HALYRD,2031-06-20,96,P,1,2\n";
  const std::string opens = "\"HALYRD,2031-06-20,95,P,1,2\n";
  const std::string closes = "HALYRD\",2031-06-20,97,P,1,2\n";
  const std::string elsewhere = "HALYRD,2031-06-20,97,P,1,2\"\n";
  for (const std::string& text :
       {opens + sound + sound, opens + sound + sound + closes + sound,
        opens + sound + elsewhere + sound, sound + opens + closes, opens + opens + opens}) {
    const LoadedQuotes read = loaded_rows(text);
    const auto strays = std::count(text.begin(), text.end(), '"');
    EXPECT_EQ(read.files[0].rows, std::count(text.begin(), text.end(), '\n')) << text;
    EXPECT_EQ(read.files[0].unreadable, strays) << text;
    EXPECT_EQ(read.table.notes, std::vector<std::string>{"a quotation mark is never closed"});
  }
}

TEST_F(LoadQuotesTest, BlankLinesAreNoRows) {
  const LoadedQuotes read = loaded_rows("\n\nHALYRD,2031-06-20,95,P,1,2\n  \n\r\n");
  EXPECT_EQ(read.files[0].rows, 1);
  EXPECT_EQ(read.table.quotes[0].line, 4);
}

TEST_F(LoadQuotesTest, ByteOrderMarkCrlfAndMissingLastLineFeedAreFine) {
  const LoadedQuotes read = loaded(
      "\xEF\xBB\xBFunderlying,expiry,strike,put_call,bid,ask\r\n"
      "HALYRD,2031-06-20,95,P,1,2\r\nHALYRD,2031-06-20,96,P,1,2");
  EXPECT_EQ(read.files[0].rows, 2);
  EXPECT_EQ(read.files[0].unreadable, 0);
  EXPECT_EQ(read.table.quotes[1].ask, 2);
}

TEST_F(LoadQuotesTest, DecimalCommasAreReadWithSemicolons) {
  options_.decimal = ',';
  options_.thousands = '.';
  const LoadedQuotes read =
      loaded("underlying;expiry;strike;put_call;bid;ask\nHALYRD;2031-06-20;1.250,5;C;0,25;0,3\n");
  EXPECT_EQ(read.table.quotes[0].strike, 1250.5);
  EXPECT_EQ(read.table.quotes[0].bid, 0.25);
}

TEST_F(LoadQuotesTest, ScalesApplyToWhatIsRead) {
  options_.strike_scale = 0.001;
  options_.price_scale = 0.01;
  const LoadedQuotes read = loaded_rows("HALYRD,2031-06-20,95000,C,150,170\n");
  EXPECT_DOUBLE_EQ(read.table.quotes[0].strike, 95);
  EXPECT_DOUBLE_EQ(read.table.quotes[0].bid, 1.5);
}

TEST_F(LoadQuotesTest, VolColumnsAreQuotedInVolAfterTheirScale) {
  options_.vol_scale = 0.01;
  const LoadedQuotes read =
      loaded("underlying,expiry,strike,put_call,bid_vol,ask_vol\nHALYRD,2031-06-20,95,C,20,21\n");
  EXPECT_EQ(read.table.quotes[0].quoted_in, QuotedIn::vol);
  EXPECT_DOUBLE_EQ(read.table.quotes[0].bid, 0.2);
  EXPECT_DOUBLE_EQ(read.table.quotes[0].ask, 0.21);
}

TEST_F(LoadQuotesTest, PricesArePreferredToVols) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,bid_vol,ask_vol,bid,ask\n"
      "HALYRD,2031-06-20,95,C,0.2,0.21,1,2\n");
  EXPECT_EQ(read.table.quotes[0].quoted_in, QuotedIn::price);
  EXPECT_EQ(read.table.quotes[0].bid, 1);
}

TEST_F(LoadQuotesTest, OnePriceBecomesBidAndAskByTheStatedHalfSpread) {
  options_.half_spread_absolute = 0.1;
  options_.half_spread_relative = 0.05;
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,price\n"
      "HALYRD,2031-06-20,95,C,2\nHALYRD,2031-06-20,95,P,0.05\nHALYRD,2031-06-20,96,P,\n");
  EXPECT_DOUBLE_EQ(read.table.quotes[0].bid, 1.8);
  EXPECT_DOUBLE_EQ(read.table.quotes[0].ask, 2.2);
  EXPECT_EQ(read.table.quotes[1].bid, 0);
  EXPECT_TRUE(std::isnan(read.table.quotes[2].bid));
}

TEST_F(LoadQuotesTest, OnePriceWithoutAHalfSpreadIsRefused) {
  const Failure failure =
      failed("underlying,expiry,strike,put_call,price\nHALYRD,2031-06-20,95,C,2\n");
  EXPECT_EQ(failure.fault, Fault::configuration);
  EXPECT_NE(failure.detail.find("half_spread"), std::string::npos);
}

TEST_F(LoadQuotesTest, OsiSymbolCarriesTheWholeContract) {
  const LoadedQuotes read = loaded(
      "osi_symbol,bid,ask\n"
      "HALYRD310620P00095500,1,2\n"
      "KELP1 310620C00100000,1,2\n"
      "nonsense,1,2\n");
  ASSERT_EQ(read.table.quotes.size(), 3U);
  const Quote& q = read.table.quotes[0];
  EXPECT_EQ(read.table.underlyings[0], "HALYRD");
  EXPECT_EQ(q.put_call, PutCall::put);
  EXPECT_EQ(q.strike, 95.5);
  EXPECT_EQ(q.expiry, at(2031, 6, 20));
  EXPECT_FALSE(q.adjusted);
  EXPECT_TRUE(read.table.quotes[1].adjusted);
  EXPECT_EQ(note(read, 2), "symbol is not an OSI symbol");
}

TEST_F(LoadQuotesTest, OwnColumnsWinOverTheOsiSymbol) {
  const LoadedQuotes read = loaded("osi_symbol,strike,bid,ask\nHALYRD310620P00095500,96,1,2\n");
  EXPECT_EQ(read.table.quotes[0].strike, 96);
}

TEST_F(LoadQuotesTest, FixedValuesStandForColumnsTheFileLacks) {
  options_.fixed = {{"underlying", "KELPWK"},    {"expiry", "2031-06-20"},
                    {"put_call", "put"},         {"exercise", "American"},
                    {"underlying_price", "101"}, {"expiry_time", "09:30"}};
  const LoadedQuotes read = loaded("strike,bid,ask\n95,1,2\n");
  const Quote& q = read.table.quotes[0];
  EXPECT_EQ(read.table.underlyings[0], "KELPWK");
  EXPECT_EQ(q.expiry, at(2031, 6, 20, 9, 30));
  EXPECT_EQ(q.put_call, PutCall::put);
  EXPECT_EQ(q.exercise, Exercise::american);
  EXPECT_EQ(q.underlying_price, 101);
}

TEST_F(LoadQuotesTest, FixedValueNoRowCouldUseIsAConfigurationFault) {
  for (const auto& [word, text] : std::vector<std::pair<std::string, std::string>>{
           {"expiry", "someday"}, {"multiplier", "x"}, {"exercise", "never"}}) {
    options_.fixed = {{"expiry", "2031-06-20"}};
    options_.fixed[word] = text;
    const Failure failure = failed("underlying,strike,put_call,bid,ask\nHALYRD,95,C,1,2\n");
    EXPECT_EQ(failure.fault, Fault::configuration) << word;
    EXPECT_NE(failure.where.find(word), std::string::npos);
  }
}

TEST_F(LoadQuotesTest, ExpiryTimeColumnOverridesSettlementWordAndDefault) {
  rules_.settlement_times = {{"am", hours{9} + minutes{30}}, {"pm", hours{16}}};
  const LoadedQuotes read = loaded(
      "underlying,expiry,expiry_time,settlement,strike,put_call,bid,ask\n"
      "HALYRD,2031-06-20,,A.M.,95,C,1,2\n"
      "HALYRD,2031-06-20,,PM,95,C,1,2\n"
      "HALYRD,2031-06-20,11:15,AM,95,C,1,2\n"
      "HALYRD,2031-06-20T10:00,,AM,95,C,1,2\n"
      "HALYRD,2031-06-20,,cash,95,C,1,2\n"
      "HALYRD,2031-06-20,noon,AM,95,C,1,2\n");
  ASSERT_EQ(read.table.quotes.size(), 6U);
  EXPECT_EQ(read.table.quotes[0].expiry, at(2031, 6, 20, 9, 30));
  EXPECT_EQ(read.table.quotes[1].expiry, at(2031, 6, 20, 16));
  EXPECT_EQ(read.table.quotes[2].expiry, at(2031, 6, 20, 11, 15));
  EXPECT_EQ(read.table.quotes[3].expiry, at(2031, 6, 20, 10));
  EXPECT_EQ(read.table.quotes[4].expiry, at(2031, 6, 20, 16));
  EXPECT_EQ(note(read, 4), "settlement word has no time; the default time holds");
  EXPECT_EQ(read.table.quotes[4].reason, Reason::none);
  EXPECT_EQ(note(read, 5), "expiry time is not a time of day");
}

TEST_F(LoadQuotesTest, ClockPlacesDatesWithoutAnOffset) {
  rules_.clock.offset = hours{-5};
  const LoadedQuotes read = loaded_rows(
      "HALYRD,2031-06-20,95,P,1,2\nHALYRD,2031-06-20T16:00Z,95,P,1,2\n"
      "HALYRD,1939896000,95,P,1,2\n");
  EXPECT_EQ(read.table.quotes[0].expiry, at(2031, 6, 20, 21));
  EXPECT_EQ(read.table.quotes[1].expiry, at(2031, 6, 20, 16));
  EXPECT_EQ(read.table.quotes[2].expiry.time_since_epoch().count(), 1939896000);
}

TEST_F(LoadQuotesTest, UnderlyingPriceIsElseTheMiddleOfItsQuote) {
  const LoadedQuotes read = loaded(
      "underlying,expiry,strike,put_call,bid,ask,underlying_bid,underlying_ask\n"
      "HALYRD,2031-06-20,95,P,1,2,99,101\nHALYRD,2031-06-20,95,P,1,2,99,\n");
  EXPECT_EQ(read.table.quotes[0].underlying_price, 100);
  EXPECT_TRUE(std::isnan(read.table.quotes[1].underlying_price));
}

TEST_F(LoadQuotesTest, GlobFilesAreReadInOrderOfNameAndOnce) {
  const std::string text = std::string(kHeader) + "HALYRD,2031-06-20,95,P,1,2\n";
  write(text, "b.csv");
  write(text, "a.csv");
  write(text, "c.txt");
  std::filesystem::create_directory(folder_ + "d.csv");
  options_.files = {folder_ + "*.csv", folder_ + "./a.csv", folder_ + "c.txt"};
  const auto read = load();
  ASSERT_TRUE(read.ok()) << read.failure().text();
  EXPECT_EQ(read->table.files,
            (std::vector<std::string>{folder_ + "a.csv", folder_ + "b.csv", folder_ + "c.txt"}));
  EXPECT_EQ(read->table.underlyings.size(), 1U);
  EXPECT_EQ(read->table.quotes[2].file, 2);
}

TEST_F(LoadQuotesTest, FileWhoseNameLooksLikeAGlobIsReadAsNamed) {
  write(std::string(kHeader) + "HALYRD,2031-06-20,95,P,1,2\n", "a[1].csv");
  options_.files = {folder_ + "a[1].csv"};
  EXPECT_TRUE(load().ok());
}

TEST_F(LoadQuotesTest, NothingToReadIsNoInput) {
  for (const std::string& path : {folder_ + "none*.csv", folder_ + "none.csv", folder_}) {
    options_.files = {path};
    const auto read = load();
    ASSERT_FALSE(read.ok());
    EXPECT_EQ(read.failure().fault, Fault::no_input) << path;
    EXPECT_EQ(read.failure().where, path);
  }
  EXPECT_EQ(load_quotes({}, rules_).failure().fault, Fault::no_input);
}

TEST_F(LoadQuotesTest, WhatIsNoCsvOfQuotesIsOneClearFailure) {
  const std::string rows = "HALYRD,2031-06-20,95,P,1,2\n";
  const std::vector<std::string> kTexts = {
      "just words\nand more\n"s,
      "a,b,c\n1,2,3\n"s,
      "\"underlying,expiry\n1,2\n"s,
      "\xFF\xFEu\0n\0"s,
      std::string(kHeader) + "A\0B"s,
      std::string(kHeader) + "HALY\xE9RD,2031-06-20,95,P,1,2\n"s,
      "underlying,expiry,strike,put_call,bid,ask\r" + rows + "\r"};
  for (const std::string& text : kTexts) {
    const Failure failure = failed(text);
    EXPECT_EQ(failure.fault, Fault::not_quotes) << testing::PrintToString(text);
    EXPECT_NE(failure.where.find("a.csv"), std::string::npos);
    EXPECT_FALSE(failure.detail.empty());
  }
}

TEST_F(LoadQuotesTest, FailureListsTheHeadersFound) {
  EXPECT_NE(failed("first,second,third\n1,2,3\n").detail.find("second"), std::string::npos);
}

TEST_F(LoadQuotesTest, HeaderAloneIsATableOfNoRows) {
  const LoadedQuotes read = loaded(std::string(kHeader));
  EXPECT_EQ(read.files[0].rows, 0);
  EXPECT_TRUE(read.table.quotes.empty());
}

TEST_F(LoadQuotesTest, CommaAsDecimalMarkLeavesThePointToGroupDigits) {
  options_.decimal = ',';
  const LoadedQuotes read = loaded(
      "underlying;expiry;strike;put_call;bid;ask\nHALYRD;2031-06-20;1.250,50;C;530,600;531\n");
  ASSERT_EQ(read.table.quotes.size(), 1U);
  EXPECT_EQ(read.table.quotes[0].strike, 1250.5);
  EXPECT_EQ(read.table.quotes[0].bid, 530.6);
}

TEST_F(LoadQuotesTest, DecimalCommaThatNobodyStatedIsUnreadableNotAThousandfold) {
  const LoadedQuotes read =
      loaded("underlying;expiry;strike;put_call;bid;ask\nHALYRD;2031-06-20;950;C;530,600;531\n");
  ASSERT_EQ(read.table.quotes.size(), 1U);
  EXPECT_EQ(read.table.quotes[0].reason, Reason::unreadable);
}

TEST_F(LoadQuotesTest, FileWithoutTextIsATableOfNoRows) {
  for (const std::string text : {"", "\n\n", "\xEF\xBB\xBF"}) {
    const LoadedQuotes read = loaded(text);
    ASSERT_EQ(read.files.size(), 1U);
    EXPECT_EQ(read.files[0].rows, 0);
    EXPECT_TRUE(read.table.quotes.empty());
  }
}

TEST_F(LoadQuotesTest, AdjustedRootIsOfTheNameBeforeItsDigit) {
  const LoadedQuotes read =
      loaded("osi,bid,ask\nKELPW1310620C00260000,1,2\nKELPW 310620C00260000,1,2\n");
  ASSERT_EQ(read.table.underlyings.size(), 1U);
  EXPECT_EQ(read.table.underlyings[0], "KELPW");
  EXPECT_TRUE(read.table.quotes[0].adjusted);
  EXPECT_FALSE(read.table.quotes[1].adjusted);
}

TEST_F(LoadQuotesTest, EndlessLineIsRefusedAndNamed) {
  const Failure failure = failed(std::string(kHeader) + std::string(std::size_t{2} << 20, 'x'));
  EXPECT_EQ(failure.fault, Fault::not_quotes);
  EXPECT_NE(failure.detail.find("line 2 "), std::string::npos);
}

TEST_F(LoadQuotesTest, TextBeyondTheReadersBlocksKeepsEveryRow) {
  // The line reader holds two blocks of 16 MiB; this text needs four.
  const std::string row = "HALYRD,2031-06-20,95,P,1.25,1.50," + std::string(200, 'x') + "\n";
  const std::size_t rows = (std::size_t{60} << 20) / row.size();
  std::string text = "underlying,expiry,strike,put_call,bid,ask,remark\n";
  for (std::size_t i = 0; i < rows; ++i) text += row;
  const LoadedQuotes read = loaded(text);
  EXPECT_EQ(read.files[0].rows, static_cast<std::int64_t>(rows));
  EXPECT_EQ(read.files[0].unreadable, 0);
  EXPECT_EQ(read.files[0].bytes, static_cast<std::int64_t>(text.size()));
}

TEST_F(LoadQuotesTest, BadOptionIsNamedWithItsValue) {
  const auto problem_of = [](auto change) {
    SourceOptions options;
    options.files = {"a.csv"};
    change(options);
    return options.problem().value_or("");
  };
  EXPECT_EQ(problem_of([](SourceOptions&) {}), "");
  EXPECT_FALSE(load_quotes({SourceOptions{}}, TimeRules{}).ok());  // no file named
  EXPECT_EQ(problem_of([](SourceOptions& o) { o.strike_scale = 0; }),
            "strike_scale = 0, must be above 0");
  EXPECT_EQ(problem_of([](SourceOptions& o) { o.half_spread_relative = -1; }),
            "half_spread_relative = -1, must be at least 0");
  EXPECT_NE(problem_of([](SourceOptions& o) { o.delimiter = '|'; }), "");
  EXPECT_NE(problem_of([](SourceOptions& o) { o.decimal = ';'; }), "");
  EXPECT_NE(problem_of([](SourceOptions& o) { o.decimal = o.thousands = ','; }), "");
  EXPECT_NE(problem_of([](SourceOptions& o) { o.date_format = "%Q"; }), "");
  options_.price_scale = -1;
  write(std::string(kHeader));
  EXPECT_EQ(load().failure().fault, Fault::configuration);
}

TEST_F(LoadQuotesTest, CellCountsOfEveryKindShareFewNotes) {
  std::string rows;
  for (int i = 10; i < 500; ++i) rows += std::string(static_cast<std::size_t>(i), ',') + "\n";
  const LoadedQuotes read = loaded_rows(rows);
  EXPECT_EQ(read.files[0].unreadable, 490);
  EXPECT_LT(read.table.notes.size(), 40U);
}

TEST_F(LoadQuotesTest, GzipFileIsReadWhateverItsName) {
  const std::string text = std::string(kHeader) + "HALYRD,2031-06-20,95,P,1,2\n";
  std::string packed;
  {
    boost::iostreams::filtering_ostream out;
    out.push(boost::iostreams::gzip_compressor());
    out.push(boost::iostreams::back_inserter(packed));
    out << text;
  }
  const LoadedQuotes read = loaded(packed);
  EXPECT_EQ(read.files[0].compression, "gzip");
  EXPECT_EQ(read.files[0].bytes, static_cast<std::int64_t>(packed.size()));
  EXPECT_EQ(read.files[0].rows, 1);
}

}  // namespace
}  // namespace duskgrid::quotes
