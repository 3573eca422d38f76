#include "publish/text.h"

#include <gtest/gtest.h>

#include <array>
#include <charconv>
#include <cmath>
#include <cstring>
#include <limits>
#include <random>
#include <set>

#include "quotes/cells.h"

namespace duskgrid::publish {
namespace {

std::string every_byte() {
  std::string all;
  for (int b = 0; b < 256; ++b) all += static_cast<char>(b);
  return all;
}

// The text of one CSV cell with its quoting taken off (RFC 4180).
std::string unquoted(std::string_view cell) {
  if (!cell.starts_with('"')) return std::string(cell);
  std::string out;
  for (std::size_t i = 1; i + 1 < cell.size(); ++i) {
    out += cell[i];
    if (cell[i] == '"') ++i;
  }
  return out;
}

TEST(EncodeFileName, LettersDigitsUnderscoreHyphenAndInnerDotStay) {
  EXPECT_EQ(encode_file_name("Halyrd_9-b.X"), "Halyrd_9-b.X");
}

TEST(EncodeFileName, OtherBytesBecomeUpperCaseHexadecimal) {
  EXPECT_EQ(encode_file_name("A/B c%"), "A%2FB%20c%25");
  EXPECT_EQ(encode_file_name("\xC3\xA9"), "%C3%A9");
}

TEST(EncodeFileName, NamesThatFoldersGiveAMeaningAreNotGiven) {
  EXPECT_EQ(encode_file_name(""), "%");
  EXPECT_EQ(encode_file_name("."), "%2E");
  EXPECT_EQ(encode_file_name(".."), "%2E.");
  EXPECT_EQ(encode_file_name(".hidden"), "%2Ehidden");
}

TEST(EncodeFileName, EveryByteComesBackWhereverItStands) {
  for (int b = 0; b < 256; ++b) {
    const auto c = static_cast<char>(b);
    for (const std::string& name :
         {std::string(1, c), "A" + std::string(1, c), std::string(1, c) + "A"}) {
      const std::string file = encode_file_name(name);
      EXPECT_EQ(file.find_first_of(std::string("/\0", 2)), std::string::npos) << "byte " << b;
      EXPECT_EQ(decode_file_name(file), name) << "byte " << b;
    }
  }
  EXPECT_EQ(decode_file_name(encode_file_name(every_byte())), every_byte());
}

TEST(EncodeFileName, DifferentNamesHaveDifferentFiles) {
  std::set<std::string> files;
  int names = 0;
  for (int a = 0; a < 256; ++a)
    for (int b = 0; b < 256; ++b, ++names)
      files.insert(encode_file_name(std::string{static_cast<char>(a), static_cast<char>(b)}));
  EXPECT_EQ(files.size(), static_cast<std::size_t>(names));
}

TEST(EncodeFileName, LongestNameThatReadersTakeFitsAFileName) {
  constexpr std::size_t kFileSystemsStop = 255;  // bytes, POSIX NAME_MAX of the usual ones
  std::size_t longest = 1;
  while (quotes::is_name(std::string(longest + 1, ' '))) ++longest;
  const std::string file = encode_file_name(std::string(longest, ' '));
  EXPECT_LE((file + ".json").size(), kFileSystemsStop);
}

TEST(DecodeFileName, TextThatNoNameIsEncodedAsIsRefused) {
  for (const char* file : {"", "%2", "A%", "A%%", "%zz", "%41", "%2f", ".", "..", ".A", "a b",
                           "A%/B", "%/", "%+1", "% 1", "A/B"})
    EXPECT_EQ(decode_file_name(file), std::nullopt) << file;
}

TEST(DecodeFileName, LonePercentSignIsTheEmptyName) { EXPECT_EQ(decode_file_name("%"), ""); }

TEST(CsvText, PlainTextStaysAndDelimitersAreQuoted) {
  EXPECT_EQ(csv_text("HALYRD"), "HALYRD");
  EXPECT_EQ(csv_text(""), "");
  EXPECT_EQ(csv_text("a,b"), "\"a,b\"");
  EXPECT_EQ(csv_text("a\"b"), "\"a\"\"b\"");
  EXPECT_EQ(csv_text("a\nb"), "\"a\nb\"");
}

TEST(CsvText, WhatASpreadsheetWouldRunGetsAnApostrophe) {
  for (const char c : {'=', '+', '-', '@', '\t', '\r'}) {
    const std::string text = std::string(1, c) + "1";
    EXPECT_EQ(unquoted(csv_text(text)), "'" + text);
  }
  EXPECT_EQ(csv_text("1=2"), "1=2");
}

TEST(CsvText, EveryTextComesBackFromItsCell) {
  for (const std::string name :
       {"=A", "'=A", "''+A", "'A", "'", "''", "-", "'-", "A'=", "=\"x\",'"})
    EXPECT_EQ(unguarded(unquoted(csv_text(name))), name);
  for (int b = 0; b < 256; ++b) {
    const std::string name = std::string(1, static_cast<char>(b)) + "A";
    EXPECT_EQ(unguarded(unquoted(csv_text(name))), name) << "byte " << b;
  }
}

TEST(Unguarded, ApostropheBeforeHarmlessTextStays) {
  EXPECT_EQ(unguarded("'A"), "'A");
  EXPECT_EQ(unguarded("'"), "'");
  EXPECT_EQ(unguarded(""), "");
}

TEST(CsvNumber, IsShort) {
  EXPECT_EQ(csv_number(0.1), "0.1");
  EXPECT_EQ(csv_number(100), "100");
  EXPECT_EQ(csv_number(-2.5), "-2.5");
}

TEST(CsvNumber, NegativeZeroIsZero) { EXPECT_EQ(csv_number(-0.0), "0"); }

TEST(CsvNumber, WhatIsNotFiniteIsEmpty) {
  constexpr double kInf = std::numeric_limits<double>::infinity();
  EXPECT_EQ(csv_number(std::numeric_limits<double>::quiet_NaN()), "");
  EXPECT_EQ(csv_number(kInf), "");
  EXPECT_EQ(csv_number(-kInf), "");
}

// Reads what csv_number() wrote and expects the same double in no more digits than needed.
void expect_shortest(double value) {
  const std::string text = csv_number(value);
  double back = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), back);
  ASSERT_EQ(error, std::errc{}) << text;
  EXPECT_EQ(end, text.data() + text.size()) << text;
  EXPECT_EQ(back, value) << text;
  const auto digits = [](std::string_view written) {
    std::string only;
    for (const char c : written.substr(0, written.find('e')))
      if (c >= '0' && c <= '9') only += c;
    only.erase(0, only.find_first_not_of('0'));
    return only.find_last_not_of('0') + 1;
  };
  std::array<char, 64> shortest{};
  const auto written = std::to_chars(shortest.data(), shortest.data() + shortest.size(), value,
                                     std::chars_format::scientific);
  const std::string_view reference(shortest.data(),
                                   static_cast<std::size_t>(written.ptr - shortest.data()));
  EXPECT_EQ(digits(text), digits(reference)) << text;
}

TEST(CsvNumber, ReadsBackToTheSameDoubleInTheFewestDigits) {
  using Limits = std::numeric_limits<double>;
  for (const double value : {Limits::min(), Limits::max(), Limits::lowest(), Limits::denorm_min(),
                             Limits::epsilon(), 1.0 / 3, 1e22, 1e23, 123456789012345678.0, 5e-324})
    expect_shortest(value);
  constexpr std::uint64_t kSeed = 20310314;
  std::mt19937_64 random(kSeed);
  for (int i = 0; i < 20000; ++i) {
    const std::uint64_t bits = random();
    double value = 0;
    std::memcpy(&value, &bits, sizeof value);
    if (std::isfinite(value) && value != 0) expect_shortest(value);
  }
}

}  // namespace
}  // namespace duskgrid::publish
