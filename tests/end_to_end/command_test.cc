// Bad inputs: one clear message or status each, and the documented exit status.
#include <gtest/gtest.h>

#include <nlohmann/json.hpp>

#include "end_to_end/program.h"
#include "pricing/black.h"

namespace duskgrid::end_to_end {
namespace {

constexpr const char* kAsOf = "2031-03-14T16:00:00-05:00";

// Rows of a sound invented chain with one volatility, three months out.
std::string sound_chain(const std::string& name) {
  std::string text;
  const double forward = 100, t = 98 / 365.0, s = 0.2 * std::sqrt(t);
  for (int strike = 80; strike <= 120; strike += 5)
    for (const auto side : {quotes::PutCall::call, quotes::PutCall::put}) {
      const double price = pricing::black_price({side, forward, double(strike), 1}, s);
      char row[200];
      std::snprintf(row, sizeof row, "%s,2031-06-20,%d,%s,%.6f,%.6f\n", name.c_str(), strike,
                    side == quotes::PutCall::call ? "C" : "P", price * 0.99, price * 1.01);
      text += row;
    }
  return text;
}
const std::string kHeader = "underlying,expiry,strike,put_call,bid,ask\n";

class Command : public testing::Test {
 protected:
  Ran build(const std::string& text, const std::vector<std::string>& more = {}) {
    spill(scratch_ / "quotes.csv", text);
    std::vector<std::string> arguments{
        "build", (scratch_ / "quotes.csv").string(), "--as-of", kAsOf, "--out", out().string()};
    arguments.insert(arguments.end(), more.begin(), more.end());
    return duskgrid(arguments);
  }
  Ran build_config(const std::string& toml) {
    spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
    spill(scratch_ / "night.toml", toml);
    return duskgrid({"build", (scratch_ / "night.toml").string(), "--out", out().string()});
  }
  fs::path out() const { return scratch_ / "out"; }
  fs::path folder() const { return out() / "2031-03-14"; }
  Scratch scratch_;
};

// One line that starts with the program's name.
void expect_one_message(const Ran& ran, const std::string& holds) {
  EXPECT_EQ(ran.err.rfind("duskgrid: ", 0), 0u) << ran.err;
  EXPECT_NE(ran.err.find(holds), std::string::npos) << ran.err;
  EXPECT_TRUE(ran.out.empty());
}

TEST_F(Command, SoundChainIsPublishedWithStatusZero) {
  const auto ran = build(kHeader + sound_chain("SANDPR"));
  EXPECT_EQ(ran.status, 0) << ran.err;
  EXPECT_TRUE(fs::exists(folder() / "grid.csv"));
}

TEST_F(Command, MissingFileIsNoInput) {
  const auto ran = duskgrid(
      {"build", (scratch_ / "no.csv").string(), "--as-of", kAsOf, "--out", out().string()});
  EXPECT_EQ(ran.status, 66);
  expect_one_message(ran, "no.csv");
  EXPECT_FALSE(fs::exists(folder()));
}

TEST_F(Command, FolderInPlaceOfAFileIsNoInput) {
  fs::create_directories(scratch_ / "folder.csv");
  EXPECT_EQ(duskgrid({"build", (scratch_ / "folder.csv").string(), "--as-of", kAsOf, "--out",
                      out().string()})
                .status,
            66);
}

TEST_F(Command, UnknownConfigurationKeyIsNamedWithTheNearestKnown) {
  const auto ran = build_config(
      "as_of = \"2031-03-14\"\n[[source]]\nfiles = [\"quotes.csv\"]\n"
      "strike_scail = 0.01\n");
  EXPECT_EQ(ran.status, 78);
  expect_one_message(ran, "source.strike_scail");
  EXPECT_NE(ran.err.find("source.strike_scale"), std::string::npos);
}

TEST_F(Command, ConfigurationThatIsNotTomlSaysTheLine) {
  const auto ran = build_config("as_of = \"2031-03-14\"\nfiles = [\n");
  EXPECT_EQ(ran.status, 78);
  expect_one_message(ran, "line");
}

TEST_F(Command, FileWithoutBidColumnIsRefusedWithTheLineToWrite) {
  const auto ran =
      build("underlying,expiry,strike,put_call,level,ask\nSANDPR,2031-06-20,80,C,1,2\n");
  EXPECT_EQ(ran.status, 65);
  expect_one_message(ran, "bid = ");
  EXPECT_NE(ran.err.find("level"), std::string::npos);
}

TEST_F(Command, TextIsNotACsvOfQuotes) {
  const auto ran = build("Dear all,\nthe feed is late tonight.\nRegards\n");
  EXPECT_EQ(ran.status, 65);
  expect_one_message(ran, "quotes.csv");
}

TEST_F(Command, BytesThatAreNoTextAreRefused) {
  EXPECT_EQ(build(std::string("\x7f"
                              "ELF\0\1\2",
                              7))
                .status,
            65);
}

TEST_F(Command, EmptyFileIsNotPublished) {
  const auto ran = build("");
  EXPECT_EQ(ran.status, 4) << ran.err;
  EXPECT_NE(ran.err.find("quotes.csv"), std::string::npos);
}

TEST_F(Command, HeaderAloneIsNotPublished) { EXPECT_EQ(build(kHeader).status, 4); }

TEST_F(Command, WhollyExpiredFileIsNotPublishedAndItsLedgerSaysWhy) {
  const auto ran = build(kHeader + "SANDPR,2030-06-20,80,C,1,2\nSANDPR,2030-06-20,80,P,1,2\n");
  EXPECT_EQ(ran.status, 4);
  for (const auto& row : read_table(folder() / "ledger.csv"))
    EXPECT_EQ(row.at("reason"), "expired");
}

TEST_F(Command, ChainWithNoUsableQuoteIsRefusedAndTheOtherPublished) {
  const auto ran = build(kHeader + sound_chain("SANDPR") +
                         "WRECKD,2031-06-20,80,C,0,2\nWRECKD,2031-06-20,80,P,0,2\n");
  EXPECT_EQ(ran.status, 4);
  const auto run = nlohmann::json::parse(slurp(folder() / "run.json"));
  EXPECT_EQ(run.at("underlyings").at("SANDPR").at("status"), "published");
  EXPECT_EQ(run.at("underlyings").at("WRECKD").at("status"), "refused");
  EXPECT_NE(run.at("underlyings").at("WRECKD").at("message").get<std::string>().find("no-bid 2"),
            std::string::npos);
}

// One stray call-put pair took the forward of its expiry with it.
TEST_F(Command, StrayPairDoesNotMoveTheForward) {
  for (const std::string strike : {"60", "102.5", "150", "400"}) {
    const auto ran = build(kHeader + sound_chain("SANDPR") + "SANDPR,2031-06-20," + strike +
                           ",C,0.01,0.05\nSANDPR,2031-06-20," + strike + ",P,0.01,0.05\n");
    ASSERT_LE(ran.status, 3) << ran.err;
    const auto forwards = read_table(folder() / "forwards.csv");
    // The chain's forward is 100, its spreads one percent of a price of four.
    EXPECT_NEAR(std::stod(forwards.at(0).at("forward")), 100, 0.1) << strike;
    EXPECT_NEAR(std::stod(forwards.at(0).at("zero_rate")), 0, 0.01) << strike;
  }
}

// A dropped row between call and put hid the pair, and the expiry with it.
TEST_F(Command, StaleRowBesideASoundPairDoesNotHideIt) {
  std::string text = "underlying,expiry,strike,put_call,bid,ask,multiplier\n";
  std::string rows = sound_chain("SANDPR");
  for (std::size_t at = 0, end; (end = rows.find('\n', at)) != std::string::npos; at = end + 1)
    text += rows.substr(at, end - at) + ",100\n";
  for (int strike = 80; strike <= 120; strike += 5)
    text += "SANDPR,2031-06-20," + std::to_string(strike) + ",C,1,2,37\n";
  EXPECT_EQ(build(text).status, 0);
}

TEST_F(Command, MorningAndAfternoonOfOneDateStayApart) {
  std::string text = "underlying,expiry,strike,put_call,bid,ask,settlement\n";
  for (const char* word : {"A.M.", "PM"}) {
    std::string rows = sound_chain("SANDPR");
    for (std::size_t at = 0, end; (end = rows.find('\n', at)) != std::string::npos; at = end + 1)
      text += rows.substr(at, end - at) + "," + word + "\n";
  }
  build(text);
  EXPECT_EQ(read_table(folder() / "forwards.csv").size(), 2u);
}

TEST_F(Command, FooterThatIsNoContractDoesNotMakeAnUnderlying) {
  EXPECT_EQ(build(kHeader + sound_chain("SANDPR") + "Total rows 18,,,,,\n").status, 0);
}

TEST_F(Command, ARunThatMarksNothingLeavesTheGoodOneOfThatNight) {
  ASSERT_EQ(build(kHeader + sound_chain("SANDPR")).status, 0);
  const auto good = slurp(folder() / "grid.csv");
  EXPECT_EQ(build(kHeader + "SANDPR,2030-06-20,80,C,1,2\n").status, 4);
  EXPECT_EQ(slurp(folder() / "grid.csv"), good);
  EXPECT_TRUE(fs::exists(out() / "2031-03-14-refused" / "ledger.csv"));
}

TEST_F(Command, BadAsOfIsUsage) {
  spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
  for (const char* as_of : {"yesterday", "2031-02-30", "31/03/2031", ""}) {
    const auto ran = duskgrid(
        {"build", (scratch_ / "quotes.csv").string(), "--as-of", as_of, "--out", out().string()});
    EXPECT_EQ(ran.status, 64) << as_of;
  }
  EXPECT_EQ(duskgrid({"build", (scratch_ / "quotes.csv").string()}).status, 64);
}

TEST_F(Command, UnknownOptionAndNoCommandAreUsage) {
  EXPECT_EQ(duskgrid({}).status, 64);
  EXPECT_EQ(duskgrid({"build", "x.csv", "--sideways"}).status, 64);
  EXPECT_EQ(duskgrid({"ponder"}).status, 64);
}

TEST_F(Command, UnknownZoneIsUsageOnTheCommandLineAndConfigurationInItsFile) {
  EXPECT_EQ(build_config("as_of = \"2031-03-14\"\nzone = \"Atlantis/Harbour\"\n[[source]]\n"
                         "files = [\"quotes.csv\"]\n")
                .status,
            78);
  const auto ran = build(kHeader + sound_chain("SANDPR"), {"--zone", "Atlantis/Harbour"});
  EXPECT_EQ(ran.status, 64);
  expect_one_message(ran, "Atlantis/Harbour");
}

TEST_F(Command, OutputThatCannotBeMadeIsCannotCreate) {
  spill(out(), "a file where the folder should be");
  const auto ran = build(kHeader + sound_chain("SANDPR"));
  EXPECT_EQ(ran.status, 73);
  expect_one_message(ran, out().string());
}

// The widest line of a text.
std::size_t width_of(const std::string& text) {
  std::size_t widest = 0;
  for (const auto& line : split(text, '\n')) widest = std::max(widest, line.size());
  return widest;
}

TEST_F(Command, HelpOfEveryCommandShowsAnExampleAndItsStatuses) {
  const std::map<std::string, std::vector<std::string>> statuses{
      {"build", {"0", "3", "4", "64", "65", "66", "70", "73", "78"}},
      {"survey", {"0", "4", "64", "65", "66", "70", "78"}},
      {"check", {"0", "3", "64", "65", "66", "70"}},
      {"value", {"0", "64", "65", "66", "70"}}};
  for (const auto& [command, listed] : statuses) {
    const auto ran = duskgrid({command, "--help"});
    EXPECT_EQ(ran.status, 0);
    EXPECT_NE(ran.out.find("Example"), std::string::npos) << command;
    // Not the path it was called by: a line could be of any width then.
    EXPECT_NE(ran.out.find("Usage: duskgrid " + command), std::string::npos);
    EXPECT_LE(width_of(ran.out), 80u) << ran.out;
    const auto at = ran.out.find("Exit status");
    ASSERT_NE(at, std::string::npos) << ran.out;
    for (const auto& status : listed) {
      const auto told = ran.out.find(" " + status + " ", at);
      const auto at_the_start = ran.out.find("\n" + status + " ", at);
      EXPECT_NE(std::min(told, at_the_start), std::string::npos) << status << ran.out;
    }
  }
  EXPECT_LE(width_of(duskgrid({"--help"}).out), 80u);
}

TEST_F(Command, SpotTakesOneValueAndMayComeAgain) {
  spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
  const std::string quotes = (scratch_ / "quotes.csv").string();
  const auto ran = duskgrid({"build", "--spot", "100", "--spot", "SANDPR=100.5", quotes, "--as-of",
                             kAsOf, "--out", out().string()});
  EXPECT_EQ(ran.status, 0) << ran.err;
  EXPECT_TRUE(fs::exists(folder() / "grid.csv"));
}

TEST_F(Command, ListWithSpacesIsToldToHaveCommas) {
  const auto ran = duskgrid({"value", "HALYRD.json", "--strike", "90", "100"});
  EXPECT_EQ(ran.status, 64);
  EXPECT_NE(ran.err.find("100"), std::string::npos) << ran.err;
  EXPECT_NE(ran.err.find("commas"), std::string::npos) << ran.err;
  EXPECT_TRUE(ran.out.empty()) << ran.out;
}

TEST_F(Command, SurveyNamesColumnsReadAndChainsFound) {
  spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
  const auto ran = duskgrid({"survey", (scratch_ / "quotes.csv").string()});
  EXPECT_EQ(ran.status, 0);
  EXPECT_NE(ran.out.find("SANDPR"), std::string::npos);
  EXPECT_NE(ran.out.find("put_call"), std::string::npos);
}

TEST_F(Command, SurveyDrawsTheLargestChainInEightyColumnsOfTheLocalesLetters) {
  spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
  const std::string quotes = (scratch_ / "quotes.csv").string();
  const auto in_locale = [&](const std::string& locale) {
    return run("/usr/bin/env", {"LC_ALL=" + locale, DUSKGRID_PROGRAM, "survey", quotes}).out;
  };
  const auto plain = in_locale("C");
  EXPECT_NE(plain.find("SANDPR: expiries down, strikes across"), std::string::npos) << plain;
  EXPECT_TRUE(std::all_of(plain.begin(), plain.end(), [](char c) { return (c & 0x80) == 0; }));
  EXPECT_NE(in_locale("C.UTF-8").find("\u2588"), std::string::npos);
}

TEST_F(Command, BuildPrintsOneLineOfJsonWhenAsked) {
  spill(scratch_ / "quotes.csv", kHeader + sound_chain("SANDPR"));
  const auto ran = duskgrid({"build", (scratch_ / "quotes.csv").string(), "--as-of", kAsOf, "--out",
                             out().string(), "--json"});
  const auto summary = nlohmann::json::parse(ran.out);
  EXPECT_EQ(std::count(ran.out.begin(), ran.out.end(), '\n'), 1);
  EXPECT_EQ(summary.at("exit_status"), ran.status);
  EXPECT_EQ(summary.at("folder"), folder().string());
  EXPECT_EQ(summary.at("underlyings").at("published"), 1);
  EXPECT_EQ(summary.at("rows").at("read"), summary.at("rows").at("used").get<int>() +
                                               summary.at("rows").at("spare").get<int>() +
                                               summary.at("rows").at("dropped").get<int>());
  // Not a terminal: no colour and no progress.
  EXPECT_EQ(ran.err.find('\033'), std::string::npos);
}

TEST_F(Command, NamesThatASpreadsheetWouldRunAreGuardedInCsvAndPlainInJson) {
  ASSERT_EQ(build(kHeader + sound_chain("=1+1") + sound_chain("../up")).status, 0);
  bool guarded = false;
  for (const auto& row : read_table(folder() / "grid.csv")) {
    EXPECT_NE(row.at("underlying").front(), '=');
    guarded = guarded || row.at("underlying") == "'=1+1";
  }
  EXPECT_TRUE(guarded);
  const auto run = nlohmann::json::parse(slurp(folder() / "run.json"));
  EXPECT_TRUE(run.at("underlyings").contains("=1+1"));
  EXPECT_TRUE(fs::exists(folder() / "surfaces" / "%2E.%2Fup.json"));
}

TEST_F(Command, CheckFindsAnArbitrageInAForeignGrid) {
  // A middle strike far too dear: a butterfly anyone would sell.
  spill(scratch_ / "grid.csv",
        "strike,vol,forward,year_fraction\n90,0.20,100,0.5\n100,0.35,100,0.5\n110,0.20,100,0.5\n");
  const auto ran = duskgrid({"check", (scratch_ / "grid.csv").string()});
  EXPECT_EQ(ran.status, 3);
  EXPECT_NE(ran.out.find("butterfly"), std::string::npos);
  EXPECT_EQ(duskgrid({"check", (scratch_ / "none.csv").string()}).status, 66);
  spill(scratch_ / "text.csv", "hello\n");
  EXPECT_EQ(duskgrid({"check", (scratch_ / "text.csv").string()}).status, 65);
}

}  // namespace
}  // namespace duskgrid::end_to_end
