#include "publish/report.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>
#include <random>

#include "publish/report_text.h"
#include "sample_report.h"

namespace duskgrid::publish {
namespace {

using nlohmann::json;

// What stands between the opening of the data block and the end of its element.
std::string data_of(const std::string& page) {
  const std::string open = "<script type=\"application/json\" id=\"data\">";
  const auto begin = page.find(open) + open.size();
  return page.substr(begin, page.find("</script>", begin) - begin);
}

std::string texted(std::string_view text) {
  JsonText out;
  return out.text(text).take();
}

TEST(JsonTextTest, EscapesWhatWouldEndAScriptOrALine) {
  EXPECT_EQ(texted("</script><!--"), "\"\\u003c/script\\u003e\\u003c!--\"");
  EXPECT_EQ(texted("a&b"), "\"a\\u0026b\"");
  EXPECT_EQ(texted("\xE2\x80\xA8\xE2\x80\xA9"), "\"\\u2028\\u2029\"");
  EXPECT_EQ(texted("\"\\\n\x7F"), "\"\\\"\\\\\\u000a\\u007f\"");
}

TEST(JsonTextTest, BytesThatAreNotUtf8BecomeTheReplacementCharacter) {
  const std::string replacement = "\xEF\xBF\xBD";
  for (const std::string bad : {"\xFF", "\xC3", "\x80", "\xC0"})
    EXPECT_EQ(texted(bad), "\"" + replacement + "\"");
  EXPECT_EQ(texted("\xED\xA0\x80"), "\"" + replacement + replacement + replacement + "\"");
  for (const std::string good : {"\xC3\xA9", "\xE2\x82\xAC", "\xF0\x9F\x8C\x92"})
    EXPECT_EQ(texted(good), "\"" + good + "\"");
}

TEST(JsonTextTest, NumbersThatDoNotExistAreNullAndDigitsAreThoseAsked) {
  JsonText out;
  out.open('[').number(quotes::kAbsent).number(-0.0).number(1.0 / 3, 4).number(0.1).close(']');
  EXPECT_EQ(out.take(), "[null,0,0.3333,0.1]");
}

TEST(AppendRounded, IsWithinHalfOfTheLastDigitAndHasNoMoreDigits) {
  std::mt19937_64 random(3);
  std::uniform_real_distribution<double> exponent(-9, 11), digit(1, 10);
  // The product by a power of ten is rounded once, and reading back once more.
  constexpr double kRounding = 4e-16;
  for (int i = 0; i < 20'000; ++i) {
    const int digits = 1 + i % 9;
    const double value = (i % 2 ? 1 : -1) * digit(random) * std::pow(10, exponent(random));
    std::string text;
    append_rounded(text, value, digits);
    const double read = std::stod(text);
    const double unit = std::pow(10, std::floor(std::log10(std::abs(value))) - digits + 1);
    EXPECT_LE(std::abs(read - value), 0.5 * unit + kRounding * std::abs(value)) << text;
    std::string again;
    append_rounded(again, read, digits);
    EXPECT_EQ(std::stod(again), read) << text;
  }
}

TEST(AppendRounded, WritesPlainly) {
  const auto rounded = [](double value, int digits) {
    std::string text;
    append_rounded(text, value, digits);
    return text;
  };
  EXPECT_EQ(rounded(0, 5), "0");
  EXPECT_EQ(rounded(-0.0, 5), "0");
  EXPECT_EQ(rounded(9.99996, 5), "10");
  EXPECT_EQ(rounded(0.0999999, 3), "0.1");
  EXPECT_EQ(rounded(-2858.53, 8), "-2858.53");
  EXPECT_EQ(rounded(100, 3), "100");
  EXPECT_EQ(rounded(0.00012345, 4), "0.0001235");
  EXPECT_EQ(rounded(123456, 3), "1.23e+05");
}

TEST(FillTemplate, WhatIsPutInIsNotLookedAtAgain) {
  EXPECT_EQ(fill_template("a{{x}}b{{y}}c{{z}}", {{"x", "{{y}}"}, {"y", "2"}}), "a{{y}}b2c");
}

TEST(PolicyHash, IsBase64OfTheSum) {
  // SHA-256 of the empty text, FIPS 180-4 example values; base64 by hand with coreutils.
  EXPECT_EQ(policy_hash(""), "'sha256-47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU='");
}

TEST(ReportFileName, NeverTakesThePlaceOfTheIndex) {
  EXPECT_EQ(report_file_name("QNOR"), "QNOR.html");
  EXPECT_EQ(report_file_name("=1+1"), "%3D1%2B1.html");
  EXPECT_EQ(report_file_name("index"), "%index.html");
  EXPECT_EQ(report_file_name("INDEX"), "%INDEX.html");
}

TEST(ReportScopeTest, WordsReadBack) {
  for (const auto scope :
       {ReportScope::automatic, ReportScope::all, ReportScope::flagged, ReportScope::none})
    EXPECT_EQ(parse_report_scope(word(scope)), scope);
  EXPECT_FALSE(parse_report_scope("some"));
}

TEST(ReportIndex, WorstComeFirstAndStatusesDecide) {
  const SampleNight night(300);
  const auto data = json::parse(data_of(report_index(night.run, night.lines, {})));
  int last = 3;
  for (const auto& row : data.at("underlyings")) {
    EXPECT_LE(row.at(1).get<int>(), last);
    last = row.at(1);
  }
  EXPECT_EQ(data.at("underlyings").size(), 300u);
}

TEST(ReportIndex, OfSixThousandIsUnderFiveMebibytes) {
  const SampleNight night(6000);
  EXPECT_LT(report_index(night.run, night.lines, {}).size(), std::size_t{5} << 20);
}

TEST(ReportIndex, ForbidsEverySourceButItsOwnScriptAndStyle) {
  const SampleNight night(3);
  const auto page = report_index(night.run, night.lines, {});
  const auto from = page.rfind("<script>") + 8;
  const auto script = page.substr(from, page.rfind("</script>") - from);
  EXPECT_NE(page.find("default-src 'none'; script-src " + policy_hash(script)), std::string::npos);
  EXPECT_EQ(script.find("</"), std::string::npos);
}

TEST(ReportIndex, NamesAreNeverMarkup) {
  const SampleNight night(20);
  const auto page = report_index(night.run, night.lines, std::vector<std::string>{"<img src=x>"});
  EXPECT_EQ(page.find("<script>alert"), std::string::npos);
  EXPECT_EQ(page.find("<img"), std::string::npos);
  bool seen = false;
  const auto data = json::parse(data_of(page));
  for (const auto& row : data.at("underlyings"))
    seen = seen || row.at(0) == "<script>alert(1)</script>";
  EXPECT_TRUE(seen);
}

TEST(ReportPage, HoldsEveryQuoteWithItsReasonAndLine) {
  const SampleReport sample("MOOR", 5, 21);
  const auto data = json::parse(data_of(report_page(sample.subject, sample.table, sample.as_of)));
  std::size_t quotes = 0, outliers = 0;
  for (const auto& expiry : data.at("expiries"))
    for (const auto& quote : expiry.at("quotes")) {
      ++quotes;
      if (quote.at(2) != static_cast<int>(quotes::Reason::outlier)) continue;
      ++outliers;
      EXPECT_EQ(quote.at(0), sample.outlier_strike);
      EXPECT_EQ(expiry.at("label"), quotes::format_date(sample.as_of.clock, sample.broken_expiry));
    }
  EXPECT_EQ(quotes, 4u * 42u);  // the carried expiry has none
  EXPECT_EQ(outliers, 1u);
  EXPECT_EQ(data.at("unplaced").size(), 1u);
  EXPECT_EQ(data.at("unplaced").at(0).at(10), 99'999);
}

TEST(ReportPage, CurvesAreThoseOfTheSurface) {
  const SampleReport sample("MOOR", 3, 11);
  const auto data = json::parse(data_of(report_page(sample.subject, sample.table, sample.as_of)));
  // Both are printed to 5 digits; the slope of the smile turns that of k into less than one more.
  constexpr double kPrinted = 2e-5;
  for (std::size_t i = 0; i < 3; ++i) {
    const auto& slice = sample.surface.slices[i];
    const auto& fit = data.at("expiries").at(i).at("fit");
    ASSERT_EQ(fit.at("k").size(), fit.at("vol").size());
    for (std::size_t j = 0; j < fit.at("k").size(); ++j)
      EXPECT_NEAR(fit.at("vol").at(j).get<double>(),
                  std::sqrt(surface::smile_of(slice, fit.at("k").at(j)).w / slice.year_fraction),
                  kPrinted);
    // Both ends of what rests on quotes are drawn, as they are named.
    for (const char* end : {"low", "high"})
      EXPECT_EQ(std::count(fit.at("k").begin(), fit.at("k").end(), fit.at(end)), 1) << end;
    EXPECT_TRUE(std::is_sorted(fit.at("k").begin(), fit.at("k").end()));
    EXPECT_LE(fit.at("k").front().get<double>(), slice.k_low);
    EXPECT_GE(fit.at("k").back().get<double>(), slice.k_high);
  }
}

TEST(ReportPage, SaysWhatWasCarriedChangedAndBroken) {
  const SampleReport sample("MOOR", 5, 21);
  const auto data = json::parse(data_of(report_page(sample.subject, sample.table, sample.as_of)));
  EXPECT_EQ(data.at("expiries").back().at("carried").at(1), 3.0);
  int flagged = 0;
  for (const auto& change : data.at("changes"))
    if (change.at(13) == 1) {
      ++flagged;
      EXPECT_EQ(change.at(1), quotes::format_date(sample.as_of.clock, sample.changed_expiry));
      double parts = 0;
      for (int part = 7; part < 13; ++part) parts += change.at(part).get<double>();
      EXPECT_EQ(change.at(17), "tolerance");
      // Parts have 3 digits and vols 5: a few units of the last.
      EXPECT_NEAR(parts, change.at(6).get<double>() - change.at(5).get<double>(), 1e-4);
    }
  EXPECT_EQ(flagged, 1);
  EXPECT_EQ(data.at("violations").size(), 1u);
  EXPECT_EQ(data.at("violations").at(0).at(10).size(), 2u);
}

TEST(ReportPage, IsMadeWithoutASurface) {
  SampleReport sample("MOOR", 2, 5);
  sample.subject.surface = nullptr;
  sample.record.status = Status::refused;
  const auto data = json::parse(data_of(report_page(sample.subject, sample.table, sample.as_of)));
  EXPECT_FALSE(data.at("expiries").at(0).contains("fit"));
  EXPECT_TRUE(data.at("heat").at("rows").empty());
}

TEST(ReportPage, OfFortyExpiriesAndEightThousandQuotesIsUnderThreeMebibytes) {
  const SampleReport sample("LARGE", 40, 100);
  EXPECT_LT(report_page(sample.subject, sample.table, sample.as_of).size(), std::size_t{3} << 20);
}

TEST(ReportScript, EndsNoElementAndNamesTheLicenceOfD3) {
  const auto script = report_script();
  EXPECT_EQ(script.find("</script"), std::string::npos);
  EXPECT_NE(script.find("Mike Bostock"), std::string::npos);
  EXPECT_NE(script.find("in-the-money"), std::string::npos);
}

}  // namespace
}  // namespace duskgrid::publish
