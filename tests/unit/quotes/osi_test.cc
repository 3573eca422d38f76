#include "quotes/osi.h"

#include <gtest/gtest.h>

namespace duskgrid::quotes {
namespace {

using namespace std::chrono_literals;

// The layout is that of the options symbology initiative (2010): root in 6 characters,
// yymmdd, C or P, strike in thousandths in 8 digits. The roots are invented.

TEST(ParseOsi, PaddedSymbolIsRead) {
  const auto symbol = parse_osi("QNOR  310620C00260000");
  ASSERT_TRUE(symbol);
  EXPECT_EQ(symbol->root, "QNOR");
  EXPECT_EQ(symbol->expiry, 2031y / 6 / 20);
  EXPECT_EQ(symbol->put_call, PutCall::call);
  EXPECT_EQ(symbol->strike, 260.0);
  EXPECT_FALSE(symbol->adjusted);
}

TEST(ParseOsi, SymbolWithoutPaddingIsRead) {
  const auto symbol = parse_osi("QNOR310620P00012500");
  ASSERT_TRUE(symbol);
  EXPECT_EQ(symbol->root, "QNOR");
  EXPECT_EQ(symbol->put_call, PutCall::put);
  EXPECT_EQ(symbol->strike, 12.5);
}

TEST(ParseOsi, StrikeIsTheNearestDoubleOfItsDecimals) {
  EXPECT_EQ(parse_osi("A310620C00000001")->strike, 0.001);
  EXPECT_EQ(parse_osi("A310620C00000103")->strike, 0.103);
  EXPECT_EQ(parse_osi("HALYRD310620C99999999")->strike, 99999.999);
}

TEST(ParseOsi, RootThatEndsInADigitIsAdjusted) {
  EXPECT_TRUE(parse_osi("QNOR1 310620C00260000")->adjusted);
  EXPECT_TRUE(parse_osi("QNOR1310620C00260000")->adjusted);
  EXPECT_FALSE(parse_osi("Q1R   310620C00260000")->adjusted);
}

TEST(ParseOsi, AnythingElseIsRefused) {
  for (const char* text :
       {"", "QNOR", "310620C00260000", "      310620C00260000", "QNOR  310631C00260000",
        "QNOR  311320C00260000", "QNOR  310620X00260000", "QNOR  310620c00260000",
        "QNOR  310620C0026000", "QNOR  310620C002600000", "QNOR  310620C0026000x",
        "QN OR 310620C00260000", "  QNOR310620C00260000", "QNOR 310620C00260000",
        "QN-R  310620C00260000", "HALYRDS310620C00260000", "QNOR  31062 C00260000",
        "QNOR  310620C-0260000", "QNOR  310620C00260000 "}) {
    EXPECT_FALSE(parse_osi(text)) << text;
  }
}

TEST(FormatOsi, WritesThePaddedForm) {
  EXPECT_EQ(format_osi({"QNOR", 2031y / 6 / 20, PutCall::call, 260.0, false}),
            "QNOR  310620C00260000");
  EXPECT_EQ(format_osi({"HALYRDS", 2031y / 6 / 20, PutCall::put, 12.4996, false}),
            "HALYRD310620P00012500");
}

TEST(FormatOsi, EveryStrikeReadsBackTheSame) {
  for (int thousandths = 0; thousandths < 100'000'000; thousandths += 9'973) {
    const OsiSymbol symbol{"KELPWK", 2031y / 6 / 20, PutCall::put, thousandths / 1000.0, false};
    const auto again = parse_osi(format_osi(symbol));
    ASSERT_TRUE(again) << thousandths;
    ASSERT_EQ(again->strike, symbol.strike);
    ASSERT_EQ(again->root, symbol.root);
    ASSERT_EQ(again->expiry, symbol.expiry);
    ASSERT_EQ(again->put_call, symbol.put_call);
  }
}

TEST(FormatOsi, ContractThatTheFormCannotHoldIsEmpty) {
  EXPECT_EQ(format_osi({"QNOR", 2031y / 6 / 20, PutCall::call, 100'000.0, false}), "");
  EXPECT_EQ(format_osi({"QNOR", 2031y / 6 / 20, PutCall::call, -1.0, false}), "");
  EXPECT_EQ(format_osi({"QNOR", 2031y / 6 / 20, PutCall::call, kAbsent, false}), "");
  EXPECT_EQ(format_osi({"QNOR", 2131y / 6 / 20, PutCall::call, 260.0, false}), "");
}

}  // namespace
}  // namespace duskgrid::quotes
