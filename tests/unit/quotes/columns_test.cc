#include "quotes/columns.h"

#include <gtest/gtest.h>

#include <set>
#include <tuple>

#include "quotes/spellings.h"

namespace duskgrid::quotes {
namespace {

using Headers = std::vector<std::string>;
using Words = std::map<std::string, std::string>;

Result<ColumnMap> map_of(const Headers& headers, const Words& stated = {}, const Words& fixed = {},
                         Layout layout = Layout::automatic) {
  return map_columns(headers, {}, layout, stated, fixed);
}

const Headers kPlain{"underlying", "expiry", "strike", "put_call", "bid", "ask"};

Headers plain_with(const Headers& more) {
  Headers headers = kPlain;
  headers.insert(headers.end(), more.begin(), more.end());
  return headers;
}

// The failure's whole text, empty (and the test failed) when there is none.
std::string failure_text(const Result<ColumnMap>& result, Fault fault) {
  EXPECT_FALSE(result.ok());
  if (result.ok()) return "";
  EXPECT_EQ(result.failure().fault, fault) << result.failure().text();
  return result.failure().text();
}

bool holds(const std::string& text, const std::string& part) {
  return text.find(part) != std::string::npos;
}

TEST(Fields, TableFollowsTheEnumeration) {
  ASSERT_EQ(fields().size(), static_cast<std::size_t>(kFieldCount));
  for (std::size_t i = 0; i < fields().size(); ++i) {
    EXPECT_EQ(static_cast<std::size_t>(fields()[i].field), i);
  }
}

TEST(Fields, EverySpellingIsFoldedAndBelongsToOneField) {
  std::set<std::string_view> seen;
  for (const FieldEntry& f : fields()) {
    for (const std::string_view spelling : f.spellings) {
      EXPECT_EQ(fold_header(spelling), spelling);
      EXPECT_TRUE(seen.insert(spelling).second) << spelling;
    }
  }
}

TEST(Fields, EveryWordIsASpellingOfItsOwnField) {
  for (const FieldEntry& f : fields()) {
    EXPECT_EQ(recognise(f.word), Slot(f.field, Side::both)) << f.word;
  }
}

TEST(FoldHeader, CaseAndSeparatorsDoNotCount) {
  EXPECT_EQ(fold_header(" Bid_Price-(USD) [x]."), "bidpriceusdx");
}

TEST(Recognise, SideIsFoundAtEitherEnd) {
  const std::tuple<const char*, Field, Side> kCases[] = {
      {"bid.c", Field::bid, Side::call},
      {"c_bid", Field::bid, Side::call},
      {"call_bid", Field::bid, Side::call},
      {"bid_call", Field::bid, Side::call},
      {"put ask", Field::ask, Side::put},
      {"bidsize.p", Field::bid_size, Side::put},
      {"openint.c", Field::open_interest, Side::call},
      {"CallBid", Field::bid, Side::call},
      {"Calls Best Bid", Field::bid, Side::call},
      {"Ask (Put)", Field::ask, Side::put},
      {"P.Bid.IV", Field::bid_vol, Side::put},
      {"put_price", Field::price, Side::put}};
  for (const auto& [header, field, side] : kCases) {
    EXPECT_EQ(recognise(header), Slot(field, side)) << header;
  }
}

TEST(Recognise, LettersInsideAWordAreNoSide) {
  EXPECT_EQ(recognise("price"), Slot(Field::price, Side::both));
  EXPECT_EQ(recognise("put_call"), Slot(Field::put_call, Side::both));
  EXPECT_EQ(recognise("c/p"), Slot(Field::put_call, Side::both));
  for (const char* header : {"cbid", "pask", "c", "call", "put", "c_strike", "call_expiry", "vol",
                             "vol.c", "root", "last", "", " . "}) {
    EXPECT_FALSE(recognise(header)) << header;
  }
}

TEST(SlotOfWord, EveryWordNamesItsSlotAndNoOther) {
  EXPECT_EQ(slot_of_word("bid"), Slot(Field::bid, Side::both));
  EXPECT_EQ(slot_of_word("put_bid_vol"), Slot(Field::bid_vol, Side::put));
  EXPECT_EQ(slot_of_word("put_call"), Slot(Field::put_call, Side::both));
  EXPECT_FALSE(slot_of_word("call_strike"));
  EXPECT_FALSE(slot_of_word("Bid"));
  EXPECT_FALSE(slot_of_word(""));
}

TEST(NearestWord, FewestLettersDecide) {
  EXPECT_EQ(nearest_word("bidd"), "bid");
  EXPECT_EQ(nearest_word("expirey"), "expiry");
  EXPECT_EQ(nearest_word("call_aks"), "call_ask");
  EXPECT_EQ(nearest_word("open_intrest"), "open_interest");
}

TEST(MapColumns, OrdinaryWordsMapWhateverTheirCaseAndPlace) {
  const auto map = map_of(
      {"ASK", "Option Type", "Bid Price", "Strike-Price", "Expiration Date", "Ticker", "delta"});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->layout, Layout::contract_per_row);
  EXPECT_EQ(map->find(Field::ask), 0);
  EXPECT_EQ(map->find(Field::put_call), 1);
  EXPECT_EQ(map->find(Field::bid), 2);
  EXPECT_EQ(map->find(Field::strike), 3);
  EXPECT_EQ(map->find(Field::expiry), 4);
  EXPECT_EQ(map->find(Field::underlying), 5);
  EXPECT_EQ(map->find(Field::volume), -1);
  EXPECT_EQ(map->ignored, Headers{"delta"});
  EXPECT_EQ(map->columns.size(), 6u);
}

TEST(MapColumns, ColumnsKeepTheHeaderAsWritten) {
  const auto map = map_of({"Underlying", "Expiry", "Strike", "Right", "Bid Price", "Ask"});
  ASSERT_TRUE(map.ok());
  Headers written;
  for (const Column& column : map->columns) written.push_back(column.header);
  EXPECT_EQ(written, (Headers{"Underlying", "Expiry", "Strike", "Right", "Bid Price", "Ask"}));
}

TEST(MapColumns, QuotesOfTheUnderlyingBesideThoseOfTheContractNeedNoMapping) {
  const auto map =
      map_of({"berth", "Best Bid", "Best Ask", "Underlying Bid", "Underlying Ask", "Ticker",
              "Maturity", "Exercise Price", "call/put", "Volume", "root", "Quote Time"});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->ignored, (Headers{"berth", "root"}));
  EXPECT_EQ(map->find(Field::bid), 1);
  EXPECT_EQ(map->find(Field::underlying_bid), 3);
  EXPECT_EQ(map->find(Field::underlying_ask), 4);
  EXPECT_EQ(map->find(Field::volume), 9);
  EXPECT_EQ(map->find(Field::quote_time), 11);
}

const Headers kPairs{"strike",    "bid.c", "ask.c", "lamp.c",    "openint.c", "bid.p",
                     "asksize.p", "ask.p", "vol.p", "openint.p", "tide"};
const Words kPairsFixed{{"underlying", "HALYRD"}, {"expiry", "2031-06-20"}};

TEST(MapColumns, CallAndPutSideBySideAreFoundByTheirSuffixes) {
  const auto map = map_of(kPairs, {}, kPairsFixed);
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->layout, Layout::call_put_per_row);
  EXPECT_EQ(map->find(Field::strike), 0);
  EXPECT_EQ(map->find(Field::bid, Side::call), 1);
  EXPECT_EQ(map->find(Field::ask, Side::call), 2);
  EXPECT_EQ(map->find(Field::open_interest, Side::call), 4);
  EXPECT_EQ(map->find(Field::bid, Side::put), 5);
  EXPECT_EQ(map->find(Field::ask_size, Side::put), 6);
  EXPECT_EQ(map->find(Field::bid), -1);
  EXPECT_EQ(map->ignored, (Headers{"lamp.c", "vol.p", "tide"}));
}

TEST(MapColumns, RowsThatNameTheirSideHoldOneContract) {
  const auto map = map_of(plain_with({"call_bid", "put_bid"}));
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->layout, Layout::contract_per_row);
  EXPECT_EQ(map->ignored, (Headers{"call_bid", "put_bid"}));
}

TEST(MapColumns, OneSidedPairIsMissingTheOtherSide) {
  const auto map = map_of({"underlying", "expiry", "strike", "call_bid", "call_ask", "put_bid"});
  const std::string text = failure_text(map, Fault::not_quotes);
  EXPECT_TRUE(holds(text, "no column for put_ask;")) << text;
  EXPECT_TRUE(holds(text, "put_ask = \"<header>\"")) << text;
}

TEST(MapColumns, StatedLayoutWinsOverTheOneFound) {
  const Headers both{"underlying", "expiry",   "strike",   "put_call", "bid",
                     "ask",        "call_bid", "call_ask", "put_bid",  "put_ask"};
  const auto map = map_of(both, {}, {}, Layout::call_put_per_row);
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->find(Field::put_call), -1);
  EXPECT_EQ(map->find(Field::ask, Side::put), 9);
  EXPECT_EQ(map->ignored, (Headers{"put_call", "bid", "ask"}));
}

TEST(MapColumns, MissingFieldListsHeadersAndShowsTheLineToWrite) {
  const auto map = map_of({"underlying", "expiry", "strike", "put_call", "ask", "my bid"});
  const std::string text = failure_text(map, Fault::not_quotes);
  for (const std::string header : {"underlying", "expiry", "my bid"}) {
    EXPECT_TRUE(holds(text, '"' + header + '"')) << text;
  }
  EXPECT_TRUE(holds(text, "no column for bid;")) << text;
  EXPECT_TRUE(holds(text, "[source.columns]\nbid = \"<header>\"")) << text;
}

TEST(MapColumns, MissingUnderlyingMayBeFixed) {
  const Headers headers{"expiry", "strike", "put_call", "bid", "ask"};
  const std::string text = failure_text(map_of(headers), Fault::not_quotes);
  EXPECT_TRUE(holds(text, "underlying = \"<header>\"")) << text;
  EXPECT_TRUE(holds(text, "[source.fixed]\nunderlying = \"...\"")) << text;
  EXPECT_TRUE(map_of(headers, {}, {{"underlying", "HALYRD"}}).ok());
}

TEST(MapColumns, EveryNeededFieldIsNeeded) {
  for (std::size_t i = 0; i < kPlain.size(); ++i) {
    Headers headers = kPlain;
    const std::string gone = headers[i];
    headers[i] = "other";
    const std::string text = failure_text(map_of(headers), Fault::not_quotes);
    EXPECT_TRUE(holds(text, "no column for " + gone + ";")) << text;
  }
}

TEST(MapColumns, MissingAfterSomethingWasStatedIsAConfigurationFault) {
  const auto map =
      map_of({"name", "expiry", "strike", "put_call", "ask"}, {{"underlying", "name"}});
  EXPECT_TRUE(holds(failure_text(map, Fault::configuration), "bid = \"<header>\""));
}

TEST(MapColumns, VolsOrAPriceServeInPlaceOfBidAndAsk) {
  EXPECT_TRUE(map_of({"underlying", "expiry", "strike", "put_call", "bid_vol", "offer vol"}).ok());
  EXPECT_TRUE(map_of({"underlying", "expiry", "strike", "put_call", "settlement price"}).ok());
  const std::string text = failure_text(
      map_of({"underlying", "expiry", "strike", "put_call", "bid_vol"}), Fault::not_quotes);
  EXPECT_TRUE(holds(text, "no column for ask_vol;")) << text;
}

TEST(MapColumns, OsiSymbolServesInPlaceOfTheContract) {
  EXPECT_TRUE(map_of({"option_symbol", "bid", "ask"}).ok());
}

TEST(MapColumns, TwoHeadersForOneFieldAreRefusedWithTheLineToWrite) {
  const std::string text = failure_text(map_of(plain_with({"best_bid"})), Fault::not_quotes);
  EXPECT_TRUE(holds(text, "2 columns fit: \"bid\", \"best_bid\";")) << text;
  EXPECT_TRUE(holds(text, "[source.columns]\nbid = \"bid\"")) << text;
  EXPECT_TRUE(holds(text, "\"strike\"")) << text;
}

TEST(MapColumns, TwoHeadersForAnOptionalFieldAreRefusedToo) {
  const auto map = map_of(plain_with({"volume", "trade volume"}));
  EXPECT_TRUE(holds(failure_text(map, Fault::not_quotes), "volume = \"volume\""));
}

TEST(MapColumns, SameHeaderTwiceIsRefused) {
  const std::string text = failure_text(map_of(plain_with({"bid"})), Fault::not_quotes);
  EXPECT_TRUE(holds(text, "give each its own header")) << text;
  EXPECT_TRUE(holds(text, "bid = \"<header>\"")) << text;
  EXPECT_TRUE(map_of(plain_with({"note", "note"})).ok()) << "headers of no field may repeat";
}

TEST(MapColumns, StatedHeaderSettlesWhichOfTwoIsMeant) {
  const auto map = map_of(plain_with({"best_bid"}), {{"bid", "best_bid"}});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->find(Field::bid), 6);
  EXPECT_EQ(map->ignored, Headers{"bid"});
}

TEST(MapColumns, StatedHeaderIsFreeOfItsOrdinaryMeaning) {
  const auto map =
      map_of({"underlying", "expiry", "strike", "put_call", "ask", "price"}, {{"bid", "price"}});
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->find(Field::bid), 5);
  EXPECT_EQ(map->find(Field::price), -1);
}

TEST(MapColumns, OneHeaderMayBeStatedForTwoFields) {
  const auto map = map_of({"underlying", "expiry", "strike", "put_call", "last"},
                          {{"bid", "last"}, {"ask", "last"}});
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->find(Field::bid), 4);
  EXPECT_EQ(map->find(Field::ask), 4);
}

TEST(MapColumns, StatedSidesMakeACallPutRow) {
  const auto map =
      map_of({"underlying", "expiry", "strike", "cb", "ca", "pb", "pa"},
             {{"call_bid", "cb"}, {"call_ask", "ca"}, {"put_bid", "pb"}, {"put_ask", "pa"}});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->layout, Layout::call_put_per_row);
  EXPECT_EQ(map->find(Field::ask, Side::put), 6);
}

TEST(MapColumns, UnknownFieldWordIsToldTheNearest) {
  const std::string text = failure_text(map_of(kPlain, {{"bidd", "bid"}}), Fault::configuration);
  EXPECT_TRUE(holds(text, "\"bidd\"; the nearest is bid;")) << text;
  EXPECT_TRUE(holds(text, "[source.columns]\nbid = \"<header>\"")) << text;
  EXPECT_TRUE(holds(failure_text(map_of(kPlain, {}, {{"expirey", "x"}}), Fault::configuration),
                    "[source.fixed]\nexpiry = \"...\""));
}

TEST(MapColumns, StatedHeaderThatIsAbsentListsThoseThere) {
  const std::string text = failure_text(map_of(kPlain, {{"bid", "Bid"}}), Fault::configuration);
  EXPECT_TRUE(holds(text, "no columns are headed \"Bid\"")) << text;
  EXPECT_TRUE(holds(text, "columns found: \"underlying\", \"expiry\"")) << text;
}

TEST(MapColumns, StatedHeaderThatRepeatsIsRefused) {
  EXPECT_TRUE(
      holds(failure_text(map_of(plain_with({"x", "x"}), {{"volume", "x"}}), Fault::configuration),
            "2 columns are headed \"x\""));
}

TEST(MapColumns, FieldOfTheOtherLayoutIsRefused) {
  EXPECT_TRUE(
      holds(failure_text(map_of(plain_with({"x"}), {{"call_bid", "x"}}), Fault::configuration),
            "call_bid has no place in a file read as contract-per-row"));
  Words fixed = kPairsFixed;
  fixed["bid"] = "1";
  EXPECT_TRUE(holds(failure_text(map_of(kPairs, {}, fixed), Fault::configuration),
                    "bid has no place in a file read as call-put-per-row"));
}

TEST(MapColumns, FixedFieldWinsOverAColumnButNotBesideAStatedOne) {
  const auto map = map_of(plain_with({"currency"}), {}, {{"currency", "EUR"}});
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->find(Field::currency), -1);
  EXPECT_EQ(map->ignored, Headers{"currency"});
  failure_text(map_of(plain_with({"currency"}), {{"currency", "currency"}}, {{"currency", "EUR"}}),
               Fault::configuration);
}

TEST(MapColumns, SymbolColumnThatHoldsOsiSymbolsIsTakenAsSuch) {
  const auto map = map_columns({"symbol", "bid", "ask"}, {"QNOR  310620C00260000", "1", "2"},
                               Layout::automatic, {}, {});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->find(Field::osi_symbol), 0);
  EXPECT_EQ(map->find(Field::underlying), -1);
}

TEST(MapColumns, SymbolBesideAnUnderlyingIsTakenWhenItHoldsOsiSymbols) {
  const auto map =
      map_columns({"underlying", "symbol", "bid", "ask"}, {"QNOR", "QNOR310620C00260000", "1", "2"},
                  Layout::automatic, {}, {});
  ASSERT_TRUE(map.ok()) << map.failure().text();
  EXPECT_EQ(map->find(Field::underlying), 0);
  EXPECT_EQ(map->find(Field::osi_symbol), 1);
}

TEST(MapColumns, SymbolColumnStaysAnUnderlyingWhenTheContractIsSpelledOut) {
  const auto map = map_columns(kPlain, {"QNOR310620C00260000", "2031-06-20", "260", "C", "1", "2"},
                               Layout::automatic, {}, {});
  ASSERT_TRUE(map.ok());
  EXPECT_EQ(map->find(Field::underlying), 0);
  EXPECT_EQ(map->find(Field::osi_symbol), -1);
}

TEST(MapColumns, SymbolColumnOfOtherTextMissesTheContract) {
  const auto map =
      map_columns({"symbol", "bid", "ask"}, {"QNOR", "1", "2"}, Layout::automatic, {}, {});
  EXPECT_TRUE(
      holds(failure_text(map, Fault::not_quotes), "no column for expiry, strike, put_call;"));
}

TEST(MapColumns, ColumnStatedAsUnderlyingIsNeverTakenAsOsiSymbol) {
  const auto map = map_columns({"symbol", "bid", "ask"}, {"QNOR310620C00260000", "1", "2"},
                               Layout::automatic, {{"underlying", "symbol"}}, {});
  EXPECT_TRUE(
      holds(failure_text(map, Fault::configuration), "no column for expiry, strike, put_call;"));
}

TEST(MapColumns, HeaderNeedingEscapesIsShownAsToml) {
  const auto map = map_of({"best\"bid\"\\", "line\nfeed"});
  const std::string text = failure_text(map, Fault::not_quotes);
  EXPECT_TRUE(holds(text, R"("best\"bid\"\\", "line\u000Afeed")")) << text;
}

TEST(MapColumns, ThousandsOfLongHeadersAreListedInPart) {
  // Three-byte characters after one byte: a cut at 60 bytes would fall inside one.
  std::string wide_header;
  for (int i = 0; i < 30; ++i) wide_header += "\xE2\x82\xAC";
  const Headers headers(5'000, "x" + wide_header);
  const std::string text = failure_text(map_of(headers), Fault::not_quotes);
  EXPECT_LT(text.size(), 6'000u);
  EXPECT_TRUE(holds(text, "and 4940 more")) << text;
  EXPECT_TRUE(holds(text, "\xE2\x82\xAC\"...")) << text;
}

TEST(MapColumns, EmptyHeaderRowIsNotQuotes) {
  failure_text(map_of({}), Fault::not_quotes);
  failure_text(map_of({"", "", ""}), Fault::not_quotes);
}

TEST(Layout, WordsAreThoseOfTheConfiguration) {
  EXPECT_EQ(word(Layout::automatic), "automatic");
  EXPECT_EQ(word(Layout::contract_per_row), "contract-per-row");
  EXPECT_EQ(word(Layout::call_put_per_row), "call-put-per-row");
}

}  // namespace
}  // namespace duskgrid::quotes
