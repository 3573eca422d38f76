#include "quotes/cells.h"

#include <gtest/gtest.h>

#include <cstdlib>
#include <random>
#include <string>

namespace duskgrid::quotes {
namespace {

const CellRules& ordinary() {
  static const CellRules kRules('.', ',', {});
  return kRules;
}

TEST(CellRules, PlainNumbersAreReadToTheNearestDouble) {
  EXPECT_EQ(ordinary().number("0"), 0.0);
  EXPECT_EQ(ordinary().number("12.5"), 12.5);
  EXPECT_EQ(ordinary().number("+12.5"), 12.5);
  EXPECT_EQ(ordinary().number("-0.05"), -0.05);
  EXPECT_EQ(ordinary().number(".5"), 0.5);
  EXPECT_EQ(ordinary().number("1e3"), 1000.0);
  EXPECT_EQ(ordinary().number("0.1000000000000000055511151231257827"), 0.1);
}

TEST(CellRules, WhatIsNotADecimalNumberIsRefused) {
  for (const char* cell :
       {"",   "+",   "-",    ".",        "--1", "+-1", "-+1",  "1.2.3", "1e",  "12x", "$12",
        "5%", "inf", "-inf", "infinity", "nan", "NaN", "0x10", "1e400", "1 2", "1_0"}) {
    EXPECT_EQ(ordinary().number(cell), std::nullopt) << cell;
  }
}

TEST(CellRules, ThousandsSeparatorsStandBetweenGroupsOfThree) {
  EXPECT_EQ(ordinary().number("1,234"), 1234.0);
  EXPECT_EQ(ordinary().number("-12,345,678.25"), -12345678.25);
  for (const char* cell : {"1,23", "1234,567", ",123", "1,,234", "1,234,", "1.5,000", "1,2345"}) {
    EXPECT_EQ(ordinary().number(cell), std::nullopt) << cell;
  }
}

TEST(CellRules, DecimalCommaMakesThePointASeparator) {
  const CellRules rules(',', '.', {});
  EXPECT_EQ(rules.number("1.234,5"), 1234.5);
  EXPECT_EQ(rules.number("0,25"), 0.25);
  EXPECT_EQ(rules.number("1.5"), std::nullopt);
  EXPECT_EQ(rules.number("1,2,3"), std::nullopt);
}

// "1,250" with semicolons between cells was read a thousandfold.
TEST(CellRules, LoneGroupThatMayBeADecimalCommaIsRefused) {
  const CellRules rules('.', ',', {}, true);
  EXPECT_FALSE(rules.number("530,600"));
  EXPECT_FALSE(rules.number("-1,250"));
  EXPECT_EQ(rules.number("1,250.00"), 1250);
  EXPECT_EQ(rules.number("1,250,000"), 1250000);
  EXPECT_EQ(rules.number("530.6"), 530.6);
}

TEST(CellRules, WithoutASeparatorNoGroupsAreRead) {
  const CellRules rules('.', 0, {});
  EXPECT_EQ(rules.number("1234"), 1234.0);
  EXPECT_EQ(rules.number("1,234"), std::nullopt);
}

// What is short is read apart, digits over a power of ten.
TEST(CellRules, ShortNumbersAreThoseOfTheStandardLibrary) {
  std::mt19937_64 random(3);
  for (int i = 0; i < 20000; ++i) {
    std::string digits;
    for (std::uint64_t n = 1 + random() % 17; n > 0; --n)
      digits += static_cast<char>('0' + random() % 10);
    digits.insert(random() % (digits.size() + 1), ".");
    EXPECT_EQ(ordinary().number(digits), std::strtod(digits.c_str(), nullptr)) << digits;
  }
  for (const char* cell : {".", "1..2", "1.2.3", "..", "1.2x", "x"})
    EXPECT_EQ(ordinary().number(cell), std::nullopt) << cell;
  EXPECT_EQ(ordinary().number("7."), 7.0);
}

TEST(CellRules, EndlessDigitsAreReadOrRefusedButNeverOverrun) {
  EXPECT_EQ(ordinary().number(std::string(400, '9')), std::nullopt);
  EXPECT_EQ(ordinary().number("1," + std::string(400, '9')), std::nullopt);
  EXPECT_EQ(ordinary().number("0." + std::string(400, '0') + "1"), std::nullopt);
}

TEST(CellRules, NullWordsAreKnownInAnyCase) {
  const CellRules rules('.', ',', {"missing", "-1"});
  for (const char* word : {"", "NA", "n/a", "Null", "nan", "NONE", "-", "Missing", "-1"}) {
    EXPECT_TRUE(rules.is_null(word)) << word;
  }
  for (const char* word : {"0", "N", "NAB", "-2", "missin"}) {
    EXPECT_FALSE(rules.is_null(word)) << word;
  }
}

TEST(ParsePutCall, LettersWordsAndStandardCodesAreKnown) {
  for (const char* word : {"C", "c", "call", "CALL", "1"}) {
    EXPECT_EQ(parse_put_call(word), PutCall::call) << word;
  }
  for (const char* word : {"P", "p", "put", "Put", "0"}) {
    EXPECT_EQ(parse_put_call(word), PutCall::put) << word;
  }
  for (const char* word : {"", "x", "calls", "2"}) {
    EXPECT_EQ(parse_put_call(word), std::nullopt) << word;
  }
}

TEST(ParseExercise, LettersWordsAndStandardCodesAreKnown) {
  for (const char* word : {"E", "european", "European", "0"}) {
    EXPECT_EQ(parse_exercise(word), Exercise::european) << word;
  }
  for (const char* word : {"a", "AMERICAN", "1"}) {
    EXPECT_EQ(parse_exercise(word), Exercise::american) << word;
  }
  EXPECT_EQ(parse_exercise("2"), std::nullopt);
}

TEST(FoldWord, CaseDotsAndSpacesDoNotMatter) {
  EXPECT_EQ(fold_word("A.M."), "am");
  EXPECT_EQ(fold_word(" P M"), "pm");
}

TEST(IsName, LengthAndControlCharactersAreJudged) {
  EXPECT_TRUE(is_name("HALYRD"));
  EXPECT_TRUE(is_name("=KELPWK \xC3\xA9"));
  EXPECT_TRUE(is_name(std::string(80, 'x')));
  EXPECT_FALSE(is_name(std::string(81, 'x')));
  EXPECT_FALSE(is_name(""));
  EXPECT_FALSE(is_name("a\nb"));
  EXPECT_FALSE(is_name("a\x7F"));
}

}  // namespace
}  // namespace duskgrid::quotes
