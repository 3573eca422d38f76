#include "quotes/ledger.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <set>
#include <string>

namespace duskgrid::quotes {
namespace {

TEST(Reasons, EveryReasonStandsAtItsOwnPlace) {
  for (std::size_t i = 0; i < kReasonCount; ++i) {
    EXPECT_EQ(static_cast<std::size_t>(reasons()[i].reason), i);
  }
  EXPECT_EQ(static_cast<std::size_t>(Reason::no_vol), kReasonCount - 1);
}

TEST(Reasons, WordsAreUniqueAndKebabCase) {
  std::set<std::string> words;
  for (const ReasonEntry& entry : reasons()) {
    EXPECT_TRUE(words.insert(std::string(entry.word)).second) << entry.word;
    for (const char c : entry.word) EXPECT_TRUE((c >= 'a' && c <= 'z') || c == '-') << entry.word;
    const bool dash_at_end = entry.word.starts_with('-') || entry.word.ends_with('-');
    EXPECT_FALSE(dash_at_end) << entry.word;
  }
}

TEST(Reasons, OnlyNoReasonHasNoWordAndOnlyItIsUsed) {
  for (const ReasonEntry& entry : reasons()) {
    EXPECT_EQ(entry.word.empty(), entry.reason == Reason::none);
    EXPECT_EQ(entry.state == State::used, entry.reason == Reason::none) << entry.word;
    EXPECT_FALSE(entry.meaning.empty()) << entry.word;
    EXPECT_EQ(entry.meaning.find('\n'), std::string_view::npos) << entry.word;
  }
}

TEST(Reasons, WordsAreTheClosedListOfTheManual) {
  const std::set<std::string_view> kExpected{"",
                                             "in-the-money",
                                             "far-wing",
                                             "thinned",
                                             "unreadable",
                                             "expired",
                                             "too-short",
                                             "no-bid",
                                             "no-ask",
                                             "crossed",
                                             "wide",
                                             "duplicate",
                                             "stale",
                                             "non-standard",
                                             "below-intrinsic",
                                             "above-bound",
                                             "outlier",
                                             "no-forward",
                                             "immediate-exercise",
                                             "no-vol"};
  std::set<std::string_view> words;
  for (const ReasonEntry& entry : reasons()) words.insert(word(entry.reason));
  EXPECT_EQ(words, kExpected);
}

TEST(StateOf, SpareReasonsAreThoseOfSoundQuotes) {
  EXPECT_EQ(state_of(Reason::none), State::used);
  EXPECT_EQ(state_of(Reason::in_the_money), State::spare);
  EXPECT_EQ(state_of(Reason::far_wing), State::spare);
  EXPECT_EQ(state_of(Reason::thinned), State::spare);
  EXPECT_EQ(state_of(Reason::immediate_exercise), State::spare);
  const auto dropped = std::count_if(reasons().begin(), reasons().end(), [](const auto& entry) {
    return state_of(entry.reason) == State::dropped;
  });
  EXPECT_EQ(dropped, 15);
  EXPECT_EQ(word(State::used), "used");
  EXPECT_EQ(word(State::spare), "spare");
  EXPECT_EQ(word(State::dropped), "dropped");
}

TEST(LedgerCounts, EmptyCountsAddUp) { EXPECT_TRUE(LedgerCounts{}.adds_up()); }

TEST(LedgerCounts, EveryReasonIsCountedUnderItsState) {
  LedgerCounts counts;
  for (const ReasonEntry& entry : reasons()) counts.add(entry.reason);
  counts.add(Reason::none);
  EXPECT_EQ(counts.read, 21);
  EXPECT_EQ(counts.used, 2);
  EXPECT_EQ(counts.spare, 4);
  EXPECT_EQ(counts.dropped, 15);
  EXPECT_EQ(counts.by_reason[static_cast<std::size_t>(Reason::none)], 2);
  EXPECT_EQ(counts.by_reason[static_cast<std::size_t>(Reason::wide)], 1);
  EXPECT_TRUE(counts.adds_up());
}

TEST(LedgerCounts, SumOfCountsIsTheCountOfBoth) {
  LedgerCounts first;
  first.add(Reason::none);
  first.add(Reason::thinned);
  LedgerCounts second;
  second.add(Reason::stale);
  second.add(Reason::none);
  first.add(second);
  EXPECT_EQ(first.read, 4);
  EXPECT_EQ(first.used, 2);
  EXPECT_EQ(first.spare, 1);
  EXPECT_EQ(first.dropped, 1);
  EXPECT_EQ(first.by_reason[static_cast<std::size_t>(Reason::stale)], 1);
  EXPECT_TRUE(first.adds_up());
}

TEST(LedgerCounts, LostRowIsNoticed) {
  LedgerCounts counts;
  counts.add(Reason::none);
  LedgerCounts lost_row = counts;
  ++lost_row.read;
  EXPECT_FALSE(lost_row.adds_up());
  LedgerCounts lost_reason = counts;
  --lost_reason.by_reason[0];
  EXPECT_FALSE(lost_reason.adds_up());
}

}  // namespace
}  // namespace duskgrid::quotes
