#include "quotes/encoding.h"

#include <gtest/gtest.h>

#include <string>
#include <string_view>

namespace duskgrid::quotes {
namespace {

using namespace std::string_view_literals;

bool is_text(std::string_view bytes) {
  TextCheck check;
  return check.feed(bytes) && check.finish();
}

TEST(ForeignEncoding, ByteOrderMarksOfOtherEncodingsAreNamed) {
  EXPECT_EQ(foreign_encoding("\xFF\xFE"
                             "a\0"sv),
            "UTF-16 (little-endian)");
  EXPECT_EQ(foreign_encoding("\xFE\xFF\0a"sv), "UTF-16 (big-endian)");
  EXPECT_EQ(foreign_encoding("\xFF\xFE\0\0"sv), "UTF-32 (little-endian)");
  EXPECT_EQ(foreign_encoding("\0\0\xFE\xFF"sv), "UTF-32 (big-endian)");
  EXPECT_EQ(foreign_encoding("\xEF\xBB\xBF"
                             "a"sv),
            std::nullopt);
}

// Boundary characters of each row of the Unicode standard's table 3-7.
TEST(TextCheck, WellFormedCharactersOfEveryLengthAreText) {
  for (const std::string_view good :
       {"\x7F", "\xC2\x80", "\xDF\xBF", "\xE0\xA0\x80", "\xED\x9F\xBF", "\xEE\x80\x80",
        "\xEF\xBF\xBF", "\xF0\x90\x80\x80", "\xF4\x8F\xBF\xBF"}) {
    EXPECT_TRUE(is_text(good)) << testing::PrintToString(good);
  }
}

TEST(TextCheck, OverlongSurrogateTooLargeAndCutCharactersAreNoText) {
  for (const std::string_view bad :
       {"\x80"sv, "\xC1\xBF"sv, "\xE0\x9F\xBF"sv, "\xED\xA0\x80"sv, "\xF0\x8F\xBF\xBF"sv,
        "\xF4\x90\x80\x80"sv, "\xF5\x80\x80\x80"sv,
        "\xC2"
        "a"sv,
        "\xE2\x82"sv, "a\0b"sv}) {
    EXPECT_FALSE(is_text(bad)) << testing::PrintToString(bad);
  }
}

TEST(TextCheck, ProblemNamesTheLineWhereverTheBytesAreCut) {
  const std::string text = "first line, long enough for whole words\nsecond\nthird \xE2\x82 here\n";
  for (std::size_t cut = 0; cut <= text.size(); ++cut) {
    TextCheck check;
    const bool sound = check.feed(std::string_view(text).substr(0, cut)) &&
                       check.feed(std::string_view(text).substr(cut)) && check.finish();
    EXPECT_FALSE(sound);
    EXPECT_EQ(check.problem(), "line 3 has bytes that are not UTF-8") << "cut at " << cut;
  }
}

TEST(TextCheck, CharacterCutByAPieceBoundaryIsText) {
  TextCheck check;
  EXPECT_TRUE(check.feed("price in \xE2"));
  EXPECT_TRUE(check.feed("\x82"));
  EXPECT_TRUE(check.feed("\xAC"));
  EXPECT_TRUE(check.finish());
}

}  // namespace
}  // namespace duskgrid::quotes
