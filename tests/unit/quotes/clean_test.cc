#include "quotes/clean.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <limits>
#include <random>

namespace duskgrid::quotes {
namespace {

using namespace std::chrono_literals;

const Instant kAsOf{1'931'367'600s};
const Instant kExpiry = kAsOf + 98 * 24h;
constexpr double kInfinity = std::numeric_limits<double>::infinity();

// A sound quote on the next line of file 0; strikes tell contracts apart.
Quote sound(double strike) {
  Quote q;
  q.file = 0;
  q.underlying = 0;
  q.expiry = kExpiry;
  q.strike = strike;
  q.bid = 4.0;
  q.ask = 4.4;
  return q;
}

Quote priced(double strike, double bid, double ask) {
  Quote q = sound(strike);
  q.bid = bid;
  q.ask = ask;
  return q;
}

QuoteTable cleaned(std::vector<Quote> quotes, const CleanOptions& options = {}) {
  QuoteTable table;
  table.underlyings = {"HALYRD", "KELPWK"};
  table.files = {"quotes.csv"};
  table.quotes = std::move(quotes);
  for (std::size_t i = 0; i < table.quotes.size(); ++i) {
    if (table.quotes[i].line == 0) table.quotes[i].line = static_cast<std::int64_t>(i) + 2;
  }
  clean_quotes(table, kAsOf, options);
  return table;
}

Reason reason_of(const Quote& quote, const CleanOptions& options = {}) {
  return cleaned({quote}, options).quotes[0].reason;
}

std::string note_of(const QuoteTable& table, std::size_t row) {
  const std::int32_t note = table.quotes[row].note;
  return note < 0 ? "" : table.notes[note];
}

TEST(CleanOptions, DefaultsHaveNoProblem) { EXPECT_FALSE(CleanOptions{}.problem()); }

TEST(CleanOptions, FirstBrokenRuleIsNamedWithItsValue) {
  EXPECT_EQ((CleanOptions{.shortest_hours = -0.5}.problem()),
            "shortest_hours = -0.5, must be at least 0");
  EXPECT_EQ((CleanOptions{.widest = 0}.problem()), "widest = 0, must be above 0");
  EXPECT_EQ((CleanOptions{.stale_hours = -1}.problem()), "stale_hours = -1, must be at least 0");
  EXPECT_TRUE((CleanOptions{.widest = kAbsent}.problem()));
}

TEST(CleanQuotes, SoundQuoteKeepsNoReasonAndNoNote) {
  const QuoteTable table = cleaned({sound(50)});
  EXPECT_EQ(table.quotes[0].reason, Reason::none);
  EXPECT_EQ(table.quotes[0].note, -1);
  EXPECT_TRUE(table.notes.empty());
}

TEST(CleanQuotes, ExpiryAtTheAsOfIsExpiredAndOneHourLaterIsFitted) {
  Quote q = sound(50);
  q.expiry = kAsOf;
  EXPECT_EQ(reason_of(q), Reason::expired);
  q.expiry = kAsOf + 1s;
  EXPECT_EQ(reason_of(q), Reason::too_short);
  q.expiry = kAsOf + 1h - 1s;
  EXPECT_EQ(reason_of(q), Reason::too_short);
  q.expiry = kAsOf + 1h;
  EXPECT_EQ(reason_of(q), Reason::none);
}

TEST(CleanQuotes, ShortestTimeOfZeroKeepsTheLastSecond) {
  Quote q = sound(50);
  q.expiry = kAsOf + 1s;
  EXPECT_EQ(reason_of(q, {.shortest_hours = 0}), Reason::none);
}

TEST(CleanQuotes, QuoteOlderThanADayIsStale) {
  Quote q = sound(50);
  q.quote_time = kAsOf - 24h;
  EXPECT_EQ(reason_of(q), Reason::none);
  q.quote_time = kAsOf - 24h - 1s;
  EXPECT_EQ(reason_of(q), Reason::stale);
  EXPECT_EQ(reason_of(q, {.stale_hours = 0}), Reason::none);
  q.quote_time = kAsOf + 48h;
  EXPECT_EQ(reason_of(q), Reason::none);
}

TEST(CleanQuotes, BidOrAskAbsentZeroOrNegativeIsNoQuote) {
  for (const double nothing : {kAbsent, 0.0, -0.0, -1.0, kInfinity, -kInfinity}) {
    EXPECT_EQ(reason_of(priced(50, nothing, 4.4)), Reason::no_bid) << nothing;
    EXPECT_EQ(reason_of(priced(50, 4.0, nothing)), Reason::no_ask) << nothing;
    EXPECT_EQ(reason_of(priced(50, nothing, nothing)), Reason::no_bid) << nothing;
  }
}

TEST(CleanQuotes, BidAboveAskIsCrossedAndBidAtAskIsSound) {
  EXPECT_EQ(reason_of(priced(50, 4.0, std::nextafter(4.0, 0.0))), Reason::crossed);
  EXPECT_EQ(reason_of(priced(50, 4.0, 4.0)), Reason::none);
}

TEST(CleanQuotes, SpreadPastTheMultipleOfTheMidIsWide) {
  // Spread 6 on a mid of 4 is exactly the default multiple, 1.5.
  EXPECT_EQ(reason_of(priced(50, 1.0, 7.0)), Reason::none);
  EXPECT_EQ(reason_of(priced(50, 1.0, 7.125)), Reason::wide);
  EXPECT_EQ(reason_of(priced(50, 1.0, 7.0), {.widest = 1.0}), Reason::wide);
}

TEST(CleanQuotes, VolQuotesAreJudgedAlike) {
  Quote q = priced(50, 0.20, 0.22);
  q.quoted_in = QuotedIn::vol;
  EXPECT_EQ(reason_of(q), Reason::none);
  q.bid = 0;
  EXPECT_EQ(reason_of(q), Reason::no_bid);
}

TEST(CleanQuotes, FirstRuleThatAppliesWins) {
  // Each quote breaks its own rule and every later one; the next rule's turn comes when
  // the fault before it is mended.
  Quote q = priced(50, 0, 0);
  q.expiry = kAsOf;
  q.adjusted = true;
  q.quote_time = kAsOf - 48h;
  EXPECT_EQ(reason_of(q), Reason::expired);
  q.expiry = kAsOf + 1s;
  EXPECT_EQ(reason_of(q), Reason::too_short);
  q.expiry = kExpiry;
  EXPECT_EQ(reason_of(q), Reason::stale);
  q.quote_time = kAsOf;
  EXPECT_EQ(reason_of(q), Reason::non_standard);
  q.adjusted = false;
  EXPECT_EQ(reason_of(q), Reason::no_bid);
  const QuoteTable table = cleaned({sound(50), q});
  EXPECT_EQ(table.quotes[0].reason, Reason::duplicate) << "duplicates go before prices";
  EXPECT_EQ(table.quotes[1].reason, Reason::no_bid);
}

TEST(CleanQuotes, UnreadableRowStaysAsItIs) {
  Quote q;
  q.reason = Reason::unreadable;
  q.note = 7;
  const QuoteTable table = cleaned({q});
  EXPECT_EQ(table.quotes[0].reason, Reason::unreadable);
  EXPECT_EQ(table.quotes[0].note, 7);
}

TEST(CleanQuotes, AdjustedContractIsNonStandardAndCompetesWithNone) {
  Quote adjusted = priced(50, 4.1, 4.2);
  adjusted.adjusted = true;
  const QuoteTable table = cleaned({adjusted, sound(50)});
  EXPECT_EQ(table.quotes[0].reason, Reason::non_standard);
  EXPECT_EQ(note_of(table, 0), "adjusted contract");
  EXPECT_EQ(table.quotes[1].reason, Reason::none);
}

std::vector<Quote> with_multipliers(const std::vector<double>& multipliers) {
  std::vector<Quote> quotes;
  for (std::size_t i = 0; i < multipliers.size(); ++i) {
    quotes.push_back(sound(50 + static_cast<double>(i)));
    quotes.back().multiplier = multipliers[i];
  }
  return quotes;
}

TEST(CleanQuotes, MultiplierUnlikeTheCommonOneIsNonStandard) {
  const QuoteTable table = cleaned(with_multipliers({150, 100, 100, 10, kAbsent}));
  EXPECT_EQ(table.quotes[0].reason, Reason::non_standard);
  EXPECT_EQ(note_of(table, 0), "odd multiplier");
  EXPECT_EQ(table.quotes[1].reason, Reason::none);
  EXPECT_EQ(table.quotes[2].reason, Reason::none);
  EXPECT_EQ(table.quotes[3].reason, Reason::non_standard);
  EXPECT_EQ(table.quotes[4].reason, Reason::none) << "no multiplier stated, none judged";
}

TEST(CleanQuotes, OfEquallyCommonMultipliersTheSmallerIsOrdinary) {
  const QuoteTable table = cleaned(with_multipliers({100, 10, 100, 10}));
  EXPECT_EQ(table.quotes[0].reason, Reason::non_standard);
  EXPECT_EQ(table.quotes[1].reason, Reason::none);
}

TEST(CleanQuotes, EachUnderlyingHasItsOwnMultiplier) {
  std::vector<Quote> quotes = with_multipliers({100, 100, 1000});
  quotes[2].underlying = 1;
  for (const Quote& q : cleaned(quotes).quotes) EXPECT_EQ(q.reason, Reason::none);
}

TEST(CleanQuotes, ContractsThatDifferInOnePartAreNoDuplicates) {
  Quote other_name = sound(50);
  other_name.underlying = 1;
  Quote other_expiry = sound(50);
  other_expiry.expiry += 1s;
  Quote other_side = sound(50);
  other_side.put_call = PutCall::put;
  Quote other_strike = sound(std::nextafter(50.0, 51.0));
  for (const Quote& q :
       cleaned({sound(50), other_name, other_expiry, other_side, other_strike}).quotes) {
    EXPECT_EQ(q.reason, Reason::none);
  }
}

TEST(CleanQuotes, LatestOfARepeatedContractIsKeptEvenWhenWider) {
  Quote early = priced(50, 4.1, 4.2);
  early.quote_time = kAsOf - 2h;
  Quote late = priced(50, 4.0, 4.4);
  late.quote_time = kAsOf - 1h;
  const QuoteTable table = cleaned({early, late, priced(50, 4.1, 4.2)});
  EXPECT_EQ(table.quotes[0].reason, Reason::duplicate);
  EXPECT_EQ(note_of(table, 0), "a later quote is kept");
  EXPECT_EQ(table.quotes[1].reason, Reason::none);
  EXPECT_EQ(table.quotes[2].reason, Reason::duplicate) << "a row without time is the oldest";
}

TEST(CleanQuotes, NarrowestSoundSpreadOfARepeatedContractIsKept) {
  const QuoteTable table = cleaned(
      {priced(50, 4.0, 4.4), priced(50, 4.1, 4.3), priced(50, 4.3, 4.1), priced(50, 0, 0.1)});
  EXPECT_EQ(table.quotes[1].reason, Reason::none);
  for (const std::size_t row : {0, 2, 3}) {
    EXPECT_EQ(table.quotes[row].reason, Reason::duplicate);
    EXPECT_EQ(note_of(table, row), "a narrower quote is kept");
  }
  EXPECT_EQ(table.notes.size(), 1u) << "notes are shared between rows";
}

TEST(CleanQuotes, EqualSpreadsAreDecidedByBidThenAskThenLine) {
  // Halves and quarters: the spreads are equal to the bit.
  const QuoteTable by_bid = cleaned({priced(50, 4.0, 4.5), priced(50, 4.25, 4.75)});
  EXPECT_EQ(by_bid.quotes[0].reason, Reason::duplicate);
  EXPECT_EQ(note_of(by_bid, 0), "a better quote is kept");
  const QuoteTable by_ask = cleaned({priced(50, 0, 0.2), priced(50, 0, 0.1)});
  EXPECT_EQ(by_ask.quotes[0].reason, Reason::duplicate);
  EXPECT_EQ(by_ask.quotes[1].reason, Reason::no_bid);
  const QuoteTable by_line = cleaned({sound(50), sound(50)});
  EXPECT_EQ(by_line.quotes[0].reason, Reason::none);
  EXPECT_EQ(by_line.quotes[1].reason, Reason::duplicate);
  EXPECT_EQ(note_of(by_line, 1), "the same quote is kept");
}

TEST(CleanQuotes, IdenticalRowsKeepTheLowestFileThenLine) {
  Quote first = sound(50);
  first.file = 1;
  first.line = 2;
  Quote second = sound(50);
  second.line = 9;
  Quote third = sound(50);
  third.line = 8;
  const QuoteTable table = cleaned({first, second, third});
  EXPECT_EQ(table.quotes[2].reason, Reason::none);
}

TEST(CleanQuotes, ExpiredDuplicatesStayExpired) {
  Quote q = sound(50);
  q.expiry = kAsOf - 1s;
  for (const Quote& cleaned_quote : cleaned({q, q}).quotes) {
    EXPECT_EQ(cleaned_quote.reason, Reason::expired);
  }
}

TEST(CleanQuotes, OptionsThatKeepMoreNeverDropMore) {
  std::mt19937 random(310314);
  std::uniform_real_distribution<double> bid(0.05, 2.0);
  std::uniform_real_distribution<double> spread(0.0, 8.0);
  std::vector<Quote> quotes;
  for (int i = 0; i < 500; ++i) {
    const double b = bid(random);
    quotes.push_back(priced(i + 1, b, b + spread(random)));
    quotes.back().quote_time = kAsOf - i * 10min;
  }
  const QuoteTable strict = cleaned(quotes, {.widest = 0.5, .stale_hours = 12});
  const QuoteTable lenient = cleaned(quotes, {.widest = 1.0, .stale_hours = 48});
  int freed = 0;
  for (std::size_t i = 0; i < quotes.size(); ++i) {
    const bool kept = strict.quotes[i].reason == Reason::none;
    const bool kept_by_lenient = lenient.quotes[i].reason == Reason::none;
    EXPECT_TRUE(!kept || kept_by_lenient) << i;
    freed += kept_by_lenient && !kept ? 1 : 0;
  }
  EXPECT_GT(freed, 0);
}

TEST(CleanQuotes, RowOrderDoesNotMatter) {
  // Few strikes, times and prices, so that nearly every contract is repeated.
  std::mt19937 random(20310314);
  const auto any = [&](int n) { return static_cast<int>(random() % static_cast<unsigned>(n)); };
  std::vector<Quote> quotes;
  for (int i = 0; i < 2'000; ++i) {
    Quote q = priced(50 + any(40), 0.25 * any(8), 0.25 * any(12));
    q.underlying = any(2);
    q.put_call = any(2) == 0 ? PutCall::call : PutCall::put;
    q.quote_time = any(3) == 0 ? kNoInstant : kAsOf - any(30) * 1h;
    q.multiplier = any(20) == 0 ? 10 : 100;
    q.adjusted = any(30) == 0;
    q.expiry = any(50) == 0 ? kAsOf : kExpiry;
    q.line = i + 2;
    quotes.push_back(q);
  }
  const auto reasons_by_line = [](const QuoteTable& table) {
    std::vector<std::pair<Reason, std::string>> said(table.quotes.size());
    for (std::size_t i = 0; i < table.quotes.size(); ++i) {
      said[table.quotes[i].line - 2] = {table.quotes[i].reason, note_of(table, i)};
    }
    return said;
  };
  const auto expected = reasons_by_line(cleaned(quotes));
  for (int round = 0; round < 5; ++round) {
    std::shuffle(quotes.begin(), quotes.end(), random);
    EXPECT_EQ(reasons_by_line(cleaned(quotes)), expected);
  }
}

TEST(CleanQuotes, OneRowOfEveryContractSurvivesTheDuplicates) {
  std::vector<Quote> quotes;
  for (int i = 0; i < 300; ++i) quotes.push_back(sound(1 + i % 7));
  const QuoteTable table = cleaned(quotes);
  const auto kept = std::count_if(table.quotes.begin(), table.quotes.end(),
                                  [](const Quote& q) { return q.reason == Reason::none; });
  EXPECT_EQ(kept, 7);
}

TEST(CleanQuotes, EmptyTableStaysEmpty) { EXPECT_TRUE(cleaned({}).quotes.empty()); }

TEST(NoteIndex, TextIsAddedOnceAndFoundAgain) {
  QuoteTable table;
  EXPECT_EQ(table.note_index("first"), 0);
  EXPECT_EQ(table.note_index("second"), 1);
  EXPECT_EQ(table.note_index("first"), 0);
  EXPECT_EQ(table.notes, (std::vector<std::string>{"first", "second"}));
}

}  // namespace
}  // namespace duskgrid::quotes
