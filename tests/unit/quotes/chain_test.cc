#include "quotes/chain.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <random>

namespace duskgrid::quotes {
namespace {

using namespace std::chrono_literals;

const Instant kJune{1'939'752'000s};
const Instant kSeptember = kJune + 91 * 24h;

Quote quote(std::int32_t underlying, Instant expiry, double strike, PutCall put_call,
            Reason reason = Reason::none) {
  Quote q;
  q.underlying = underlying;
  q.expiry = expiry;
  q.strike = strike;
  q.put_call = put_call;
  q.reason = reason;
  return q;
}

QuoteTable two_names() {
  QuoteTable table;
  table.underlyings = {"KELPWK", "HALYRD"};
  table.quotes = {quote(0, kJune, 100, PutCall::put),  quote(1, kSeptember, 50, PutCall::call),
                  quote(0, kJune, 90, PutCall::call),  quote(1, kJune, 55, PutCall::put),
                  quote(0, kJune, 100, PutCall::call), quote(1, kJune, 50, PutCall::put)};
  return table;
}

TEST(GroupChains, NamesComeInTheOrderOfTheirBytes) {
  const auto chains = group_chains(two_names());
  ASSERT_EQ(chains.size(), 2u);
  EXPECT_EQ(chains[0].underlying, 1);
  EXPECT_EQ(chains[1].underlying, 0);
}

TEST(GroupChains, SlicesComeByExpiryAndRowsByStrikeCallFirst) {
  const auto chains = group_chains(two_names());
  ASSERT_EQ(chains[0].slices.size(), 2u);
  EXPECT_EQ(chains[0].slices[0].expiry, kJune);
  EXPECT_EQ(chains[0].slices[0].rows, (std::vector<std::uint32_t>{5, 3}));
  EXPECT_EQ(chains[0].slices[1].expiry, kSeptember);
  EXPECT_EQ(chains[0].slices[1].rows, (std::vector<std::uint32_t>{1}));
  ASSERT_EQ(chains[1].slices.size(), 1u);
  EXPECT_EQ(chains[1].slices[0].rows, (std::vector<std::uint32_t>{2, 4, 0}));
}

TEST(GroupChains, MorningAndAfternoonOfOneDateStayApart) {
  QuoteTable table;
  table.underlyings = {"HALYRD"};
  table.quotes = {quote(0, kJune, 50, PutCall::call), quote(0, kJune - 6h, 50, PutCall::call)};
  EXPECT_EQ(group_chains(table)[0].slices.size(), 2u);
}

TEST(GroupChains, UnreadableAndDuplicateRowsAreCountedButInNoSlice) {
  QuoteTable table;
  table.underlyings = {"HALYRD"};
  table.quotes = {quote(0, kJune, 50, PutCall::call),
                  quote(0, kJune, 50, PutCall::call, Reason::duplicate),
                  quote(0, kJune, 55, PutCall::call, Reason::unreadable),
                  quote(0, kJune, 60, PutCall::call, Reason::wide),
                  quote(-1, kJune, 65, PutCall::call, Reason::unreadable)};
  const auto chains = group_chains(table);
  ASSERT_EQ(chains.size(), 1u);
  EXPECT_EQ(chains[0].read, 4);
  ASSERT_EQ(chains[0].slices.size(), 1u);
  EXPECT_EQ(chains[0].slices[0].rows, (std::vector<std::uint32_t>{0, 3}));
}

TEST(GroupChains, NameWithoutReadableRowsStillHasItsChain) {
  QuoteTable table;
  table.underlyings = {"HALYRD"};
  table.quotes = {quote(0, kJune, 50, PutCall::call, Reason::unreadable)};
  const auto chains = group_chains(table);
  ASSERT_EQ(chains.size(), 1u);
  EXPECT_EQ(chains[0].read, 1);
  EXPECT_TRUE(chains[0].slices.empty());
}

TEST(GroupChains, EmptyTableHasNoChains) { EXPECT_TRUE(group_chains(QuoteTable{}).empty()); }

TEST(GroupChains, RowOrderDoesNotMatter) {
  QuoteTable table;
  table.underlyings = {"KELPWK", "HALYRD", "QNOR"};
  for (int i = 0; i < 240; ++i) {
    table.quotes.push_back(quote(i % 3, kJune + (i / 24) * 24h, 50.0 + i / 6 % 4,
                                 i / 3 % 2 == 0 ? PutCall::call : PutCall::put));
  }
  // What the chains say, with rows replaced by the contracts they stand for.
  const auto contracts = [](const QuoteTable& t) {
    std::vector<std::tuple<std::int32_t, Instant, double, PutCall>> said;
    for (const Chain& chain : group_chains(t)) {
      for (const ChainSlice& slice : chain.slices) {
        for (const std::uint32_t row : slice.rows) {
          const Quote& q = t.quotes[row];
          said.emplace_back(chain.underlying, slice.expiry, q.strike, q.put_call);
        }
      }
    }
    return said;
  };
  const auto expected = contracts(table);
  EXPECT_EQ(expected.size(), table.quotes.size());
  std::mt19937 random(20310620);
  for (int round = 0; round < 5; ++round) {
    std::shuffle(table.quotes.begin(), table.quotes.end(), random);
    EXPECT_EQ(contracts(table), expected);
  }
}

}  // namespace
}  // namespace duskgrid::quotes
