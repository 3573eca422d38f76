#include "night/config.h"

#include <gtest/gtest.h>

#include <cmath>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>

#include "market/day_count.h"

namespace duskgrid::night {
namespace {

using nlohmann::json;
using namespace std::chrono_literals;

NightConfig parsed(const std::string& toml, const std::string& folder = "") {
  auto config = parse_config(toml, "night.toml", folder);
  if (config) return std::move(*config);
  ADD_FAILURE() << config.failure().text();
  return {};
}

Failure refused(const std::string& toml) {
  const auto config = parse_config(toml, "night.toml", "");
  if (config) {
    ADD_FAILURE() << "taken, but a failure was due: " << toml;
    return {};
  }
  EXPECT_EQ(config.failure().fault, Fault::configuration) << toml;
  EXPECT_TRUE(config.failure().where.starts_with("night.toml")) << config.failure().where;
  EXPECT_FALSE(config.failure().detail.empty());
  return config.failure();
}

bool holds(const std::string& text, const std::string& piece) {
  return text.find(piece) != std::string::npos;
}

// A value for every option that is not its default, as TOML and as JSON.
struct Stated {
  std::string table, key, toml, json;
};
const std::vector<Stated>& stated() {
  static const std::vector<Stated> kStated{
      {"", "as_of", "'2031-03-14'", "\"2031-03-14\""},
      {"", "zone", "'Europe/Paris'", "\"Europe/Paris\""},
      {"", "settlement_times", "{am = '09:30'}", R"({"am":"09:30"})"},
      {"", "spot", "101.5", "101.5"},
      {"", "rates", "{3M = 0.03, 2031-12-31 = 0.04}", R"({"3M":0.03,"2031-12-31":0.04})"},
      {"", "discount_factors", "{1Y = 0.97}", R"({"1Y":0.97})"},
      {"", "exercise", "'american'", "\"american\""},
      {"", "holidays", "['2031-12-25', 2032-01-01]", R"(["2031-12-25","2032-01-01"])"},
      {"", "dividend_files", "['/d.csv']", R"(["/d.csv"])"},
      {"", "report", "'flagged'", "\"flagged\""},
      {"source", "files", "['/a.csv', '/b*.csv']", R"(["/a.csv","/b*.csv"])"},
      {"source", "layout", "'call-put-per-row'", "\"call-put-per-row\""},
      {"source", "delimiter", "';'", "\";\""},
      {"source", "decimal", "','", "\",\""},
      {"source", "thousands", "'.'", "\".\""},
      {"source", "date_format", "'%d.%m.%Y'", "\"%d.%m.%Y\""},
      {"source", "null_words", "['none', 'x']", R"(["none","x"])"},
      {"source", "strike_scale", "0.5", "0.5"},
      {"source", "price_scale", "2", "2.0"},
      {"source", "vol_scale", "0.01", "0.01"},
      {"source", "half_spread", "0.05", "0.05"},
      {"source", "half_spread_relative", "0.02", "0.02"},
      {"source", "exercise", "'american'", "\"american\""},
      {"source", "columns", "{bid = 'Geld'}", R"({"bid":"Geld"})"},
      {"source", "fixed", "{underlying = 'HALYRD'}", R"({"underlying":"HALYRD"})"},
      {"underlying.NAME", "spot", "99", "99.0"},
      {"underlying.NAME", "carry", "-0.01", "-0.01"},
      {"underlying.NAME", "forwards", "{2031-06-20 = 100.5}", R"({"2031-06-20":100.5})"},
      {"underlying.NAME", "exercise", "'european'", "\"european\""},
      {"underlying.OTHER", "borrow", "0.02", "0.02"},
      {"underlying.OTHER", "dividends", "{2031-05-02 = 0.42}", R"({"2031-05-02":0.42})"},
      {"underlying.OTHER", "proportional_dividends", "{2031-05-02 = 0.01}",
       R"({"2031-05-02":0.01})"},
      {"clean", "shortest_hours", "2.5", "2.5"},
      {"clean", "widest", "0.75", "0.75"},
      {"clean", "stale_hours", "0", "0.0"},
      {"parity", "rate_tolerance_given", "0.001", "0.001"},
      {"parity", "rate_tolerance_common", "0.002", "0.002"},
      {"parity", "near_deviations", "0.5", "0.5"},
      {"parity", "most_near_pairs", "7", "7"},
      {"selection", "far_deviations", "4", "4.0"},
      {"selection", "most_quotes", "40", "40"},
      {"selection", "outlier_half_spreads", "3", "3.0"},
      {"backbone", "huber_half_spreads", "2", "2.0"},
      {"backbone", "least_half_spread", "0.0002", "0.0002"},
      {"backbone", "most_iterations", "50", "50"},
      {"overlay", "most_coefficients", "12", "12"},
      {"overlay", "most_rounds", "5", "5"},
      {"grid", "axis", "'delta'", "\"delta\""},
      {"grid", "points", "[0.25, 0.5]", "[0.25,0.5]"},
      {"grid", "tenors", "['1M', '2y']", R"(["1M","2y"])"},
      {"flags", "most_missed", "0.25", "0.25"},
      {"compare", "tolerance", "0.25", "0.25"},
      {"compare", "times_typical", "4.5", "4.5"},
      {"compare", "deviations", "2.5", "2.5"},
      {"compare", "least_nights", "7", "7"},
      {"compare", "most_nights", "30", "30"},
      {"carry", "most_business_days", "3", "3"},
      {"history", "surfaces", "false", "false"},
  };
  return kStated;
}

// The heading that opens a table of a configuration.
std::string heading(const std::string& table) {
  if (table.empty()) return "";
  return table == "source" ? "[[source]]\n" : "[" + table + "]\n";
}

std::string toml_of(const std::vector<Stated>& all) {
  std::string text, table;
  for (const auto& s : all) {
    if (s.table != table) text += heading(s.table);
    table = s.table;
    text += s.key + " = " + s.toml + "\n";
  }
  return text;
}

json in_table(const json& config, const std::string& table) {
  if (table.empty()) return config;
  if (table == "source") return config["source"][0];
  constexpr std::string_view kUnderlying = "underlying.";
  if (table.starts_with(kUnderlying)) return config["underlying"][table.substr(kUnderlying.size())];
  return config[table];
}

// Some options of an underlying exclude one another: those have one of their own.
std::string in_manual(const std::string& table) {
  return table == "underlying.OTHER" ? "underlying.NAME" : table;
}

TEST(ConfigOptions, EveryOptionIsReadAndShownInTheResolvedCopy) {
  const json resolved = json::parse(config_to_json(parsed(toml_of(stated()))));
  for (const auto& s : stated())
    EXPECT_EQ(in_table(resolved, s.table)[s.key], json::parse(s.json)) << s.table << " " << s.key;
}

TEST(ConfigOptions, EveryOptionIsOneOfThoseTriedHere) {
  const auto all = options();
  EXPECT_EQ(all.size(), stated().size());
  for (const auto& o : all)
    EXPECT_TRUE(std::any_of(
        stated().begin(), stated().end(),
        [&](const Stated& s) { return in_manual(s.table) == o.table && s.key == o.key; }))
        << o.table << " " << o.key;
}

TEST(ConfigOptions, EveryOptionHasARangeAMeaningAndADefaultThatIsNotTheValueTriedHere) {
  const auto all = options();
  for (const auto& o : all) {
    EXPECT_FALSE(o.range.empty()) << o.key;
    EXPECT_FALSE(o.meaning.empty()) << o.key;
    const auto tried = std::find_if(stated().begin(), stated().end(), [&](const Stated& s) {
      return in_manual(s.table) == o.table && s.key == o.key;
    });
    ASSERT_NE(tried, stated().end());
    EXPECT_NE(json::parse(o.fallback), json::parse(tried->json)) << o.table << " " << o.key;
  }
}

TEST(ConfigOptions, YieldsAndDividendsThatContradictOneAnotherAreRefused) {
  const std::pair<const char*, const char*> kWrong[] = {
      {"carry = 0.01\nborrow = 0.01", "two ways to say one thing"},
      {"carry = 0.01\ndividends = {2031-05-02 = 0.4}", "state borrow beside dividends"},
      {"borrow = 2", "borrow = 2"},
      {"dividends = {soon = 0.4}", "dividends has 'soon'"},
      {"dividends = {2031-05-02 = -0.4}", "must be >= 0"},
      {"proportional_dividends = {2031-05-02 = 1.5}", "below 1"},
  };
  for (const auto& [toml, told] : kWrong) {
    const auto config = parse_config(std::string("[underlying.HALYRD]\n") + toml, "night.toml", "");
    ASSERT_FALSE(config.ok()) << toml;
    EXPECT_EQ(config.failure().fault, Fault::configuration);
    EXPECT_NE(config.failure().text().find(told), std::string::npos) << config.failure().text();
  }
}

TEST(Resolve, DividendsOfFilesAndOfTheConfigurationAreTakenTogether) {
  const std::string path = testing::TempDir() + "config_test_dividends.csv";
  std::ofstream(path) << "underlying,ex_date,amount\nHALYRD,2031-08-01,0.44\nSALTPN,2031-08-01,1\n";
  auto config = parse_config("as_of = '2031-03-14'\ndividend_files = ['" + path +
                                 "']\n[underlying.HALYRD]\ndividends = {2031-05-02 = 0.42}\n"
                                 "proportional_dividends = {2031-11-03 = 0.01}\n",
                             "night.toml", "");
  ASSERT_TRUE(config.ok()) << config.failure().text();
  const auto night = resolve(*config);
  ASSERT_TRUE(night.ok()) << night.failure().text();
  EXPECT_EQ(night->dividends.at("HALYRD").size(), 3u);
  EXPECT_EQ(night->dividends.at("SALTPN").size(), 1u);
  ASSERT_EQ(night->dividend_rows.size(), 1u);
  EXPECT_EQ(night->dividend_rows[0].second, 2);
  std::filesystem::remove(path);
  EXPECT_FALSE(resolve(*config).ok());
}

TEST(SourcesOf, NightsExerciseStandsWhereASourceIsSilent) {
  auto config = parse_config(
      "exercise = 'american'\n[[source]]\nfiles = ['a.csv']\n"
      "[[source]]\nfiles = ['b.csv']\nexercise = 'european'\n",
      "night.toml", "");
  ASSERT_TRUE(config.ok()) << config.failure().text();
  const auto sources = sources_of(*config);
  EXPECT_EQ(sources[0].exercise, quotes::Exercise::american);
  EXPECT_EQ(sources[1].exercise, quotes::Exercise::european);
}

TEST(ConfigOptions, DateOfTomlsOwnIsTakenAsItsText) {
  const auto config = parse_config("as_of = 2031-03-14T16:00:00-05:00", "night.toml", "");
  ASSERT_TRUE(config.ok());
  EXPECT_EQ(config->as_of_text, "2031-03-14T16:00:00-05:00");
}

TEST(ConfigOptions, ValueOfAnotherKindIsRefusedWithKeyAndLine) {
  for (const auto& s : stated()) {
    // A truth value is no number, text, list or table, and a number is no truth value.
    const std::string other = s.json == "false" ? "1" : "true";
    const Failure failure = refused(heading(s.table) + s.key + " = " + other + "\n");
    EXPECT_TRUE(holds(failure.detail, s.key)) << failure.detail;
    EXPECT_EQ(failure.where, s.table.empty() ? "night.toml line 1" : "night.toml line 2") << s.key;
  }
}

TEST(ConfigOptions, UnknownKeyIsNamedWithTheNearestOne) {
  for (const auto& s : stated()) {
    const std::string slip = s.key + "x";
    const Failure failure = refused(heading(s.table) + slip + " = 1\n");
    EXPECT_TRUE(holds(failure.detail, slip)) << failure.detail;
    EXPECT_TRUE(holds(failure.detail, "'" + (s.table.empty() ? "" : s.table + ".") + s.key + "'"))
        << failure.detail;
  }
}

TEST(ParseConfig, EmptyTextIsTheDefaults) {
  EXPECT_EQ(config_to_json(parsed("")), config_to_json(NightConfig{}));
}

TEST(ParseConfig, UnknownKeyFarFromAllListsWhatIsKnown) {
  const Failure failure = refused("[clean]\nzzzzzzzz = 1\n");
  EXPECT_TRUE(holds(failure.detail, "shortest_hours, widest, stale_hours")) << failure.detail;
}

TEST(ParseConfig, UnknownTableIsNamedWithTheNearestOne) {
  EXPECT_TRUE(holds(refused("[grd]\naxis = 'delta'\n").detail, "'grid'"));
  EXPECT_TRUE(holds(refused("[[sources]]\nfiles = 'a'\n").detail, "'source'"));
}

TEST(ParseConfig, PlainValueWhereATableBelongsIsRefused) {
  for (const char* table : {"clean", "parity", "selection", "backbone", "overlay", "grid", "flags",
                            "compare", "carry", "history", "source", "underlying"})
    EXPECT_TRUE(holds(refused(std::string(table) + " = 3\n").detail, table));
  EXPECT_TRUE(holds(refused("[source]\nfiles = 'a'\n").detail, "[[source]]"));
  EXPECT_TRUE(holds(refused("[underlying]\nHALYRD = 3\n").detail, "underlying.HALYRD"));
}

TEST(ParseConfig, ValuesOutOfRangeAreRefusedWithTheirKey) {
  const struct {
    const char* toml;
    const char* key;
  } kCases[] = {
      {"spot = 0", "spot"},
      {"spot = nan", "spot"},
      {"spot = true", "spot"},
      {"[clean]\nshortest_hours = -1", "clean.shortest_hours"},
      {"[clean]\nwidest = 0", "clean.widest"},
      {"[clean]\nstale_hours = -1", "clean.stale_hours"},
      {"[parity]\nrate_tolerance_given = 0", "parity.rate_tolerance_given"},
      {"[parity]\nrate_tolerance_common = 0", "parity.rate_tolerance_common"},
      {"[parity]\nnear_deviations = 0", "parity.near_deviations"},
      {"[parity]\nmost_near_pairs = 0", "parity.most_near_pairs"},
      {"[parity]\nmost_near_pairs = 3000000000", "parity.most_near_pairs"},
      {"[parity]\nmost_near_pairs = 2.5", "parity.most_near_pairs"},
      {"[selection]\nfar_deviations = 0", "selection.far_deviations"},
      {"[selection]\nmost_quotes = -1", "selection.most_quotes"},
      {"[selection]\noutlier_half_spreads = -1", "selection.outlier_half_spreads"},
      {"[backbone]\nhuber_half_spreads = 0", "backbone.huber_half_spreads"},
      {"[backbone]\nleast_half_spread = 0", "backbone.least_half_spread"},
      {"[backbone]\nmost_iterations = 0", "backbone.most_iterations"},
      {"[grid]\naxis = 'delta'\npoints = [1.5]", "grid.points"},
      {"[grid]\ntenors = ['1Q']", "grid.tenors"},
      {"[flags]\nmost_missed = 1.5", "flags.most_missed"},
      {"[flags]\nmost_missed = -0.5", "flags.most_missed"},
      {"[compare]\ntolerance = 0", "compare.tolerance"},
      {"[compare]\nleast_nights = 30", "compare.most_nights"},
      {"[carry]\nmost_business_days = -1", "carry.most_business_days"},
      {"[history]\nsurfaces = 1", "history.surfaces"},
      {"[[source]]\nfiles = 'a'\ndelimiter = '|'", "delimiter"},
      {"[[source]]\nfiles = 'a'\ndecimal = ','\nthousands = ','", "thousands"},
      {"[[source]]\nfiles = 'a'\nprice_scale = 0", "price_scale"},
      {"[[source]]\nfiles = 'a'\nhalf_spread = -1", "half_spread"},
      {"[[source]]\nfiles = 'a'\ndate_format = '%Q'", "date_format"},
      {"[underlying.A]\nspot = -1", "spot"},
      {"[underlying.A]\ncarry = 2", "carry"},
      {"[underlying.A]\nforwards = {june = 100}", "june"},
      {"[underlying.A]\nforwards = {2031-06-20 = 0}", "2031-06-20"},
  };
  for (const auto& c : kCases)
    EXPECT_TRUE(holds(refused(c.toml).detail, c.key)) << c.toml << ": " << refused(c.toml).detail;
}

TEST(ParseConfig, BrokenTomlIsRefusedWithItsLine) {
  EXPECT_EQ(refused("zone = ''\nspot = \n").where, "night.toml line 2");
  EXPECT_EQ(refused("spot = 1\n\nspot = 2\n").where, "night.toml line 3");
  EXPECT_TRUE(holds(refused("zone = '\xFF'\n").where, "line"));
}

TEST(ParseConfig, FilesAreBesideTheConfiguration) {
  const auto config = parsed("[[source]]\nfiles = ['a.csv', '/b.csv']\n", "/night");
  EXPECT_EQ(config.sources[0].files, (std::vector<std::string>{"/night/a.csv", "/b.csv"}));
}

TEST(ParseConfig, OneFileNeedsNoListAndSourcesKeepTheirOrder) {
  const auto config = parsed("[[source]]\nfiles = 'z.csv'\n[[source]]\nfiles = 'a.csv'\n");
  ASSERT_EQ(config.sources.size(), 2U);
  EXPECT_EQ(config.sources[0].files, std::vector<std::string>{"z.csv"});
  EXPECT_EQ(config.sources[1].files, std::vector<std::string>{"a.csv"});
}

TEST(ParseConfig, FilesMayBeLeftToTheCommandLine) {
  EXPECT_TRUE(parsed("[[source]]\ndelimiter = ';'\n").sources[0].files.empty());
}

TEST(ReadConfig, FileIsReadWithItsFolder) {
  const std::string path = testing::TempDir() + "config_test.toml";
  std::ofstream(path) << "[[source]]\nfiles = 'a.csv'\n";
  const auto config = read_config(path);
  std::filesystem::remove(path);
  ASSERT_TRUE(config.ok());
  EXPECT_EQ(std::filesystem::path(config->sources[0].files[0]).parent_path(),
            std::filesystem::path(path).parent_path());
}

TEST(ReadConfig, MissingFileOrFolderIsNoInput) {
  for (const std::string& path : {testing::TempDir() + "none.toml", testing::TempDir()}) {
    const auto config = read_config(path);
    ASSERT_FALSE(config.ok());
    EXPECT_EQ(config.failure().fault, Fault::no_input);
  }
}

quotes::Instant at(int month, int day, int hour) {
  return std::chrono::sys_days{std::chrono::year{2031} / month / day} + std::chrono::hours{hour};
}

ResolvedNight resolved(const std::string& toml) {
  auto night = resolve(parsed(toml));
  if (night) return std::move(*night);
  ADD_FAILURE() << night.failure().text();
  return {};
}

Fault unresolved(const std::string& toml) {
  const auto night = resolve(parsed(toml));
  if (!night) return night.failure().fault;
  ADD_FAILURE() << "resolved, but a failure was due: " << toml;
  return {};
}

TEST(Resolve, AsOfKeepsItsOwnOffset) {
  const auto night = resolved("as_of = '2031-03-14T16:00:00-05:00'");
  EXPECT_EQ(night.as_of.instant, at(3, 14, 21));
  EXPECT_EQ(night.as_of.clock.offset, std::chrono::minutes{-300});
  EXPECT_EQ(night.times.clock.offset, std::chrono::minutes{-300});
  EXPECT_EQ(night.times.default_time, 16h);
}

TEST(Resolve, DateAloneIsFourInTheAfternoonOfTheZoneOrUtc) {
  EXPECT_EQ(resolved("as_of = '2031-03-14'").as_of.instant, at(3, 14, 16));
  // Paris is an hour ahead in winter, two in summer.
  EXPECT_EQ(resolved("as_of = '2031-03-14'\nzone = 'Europe/Paris'").as_of.instant, at(3, 14, 15));
  EXPECT_EQ(resolved("as_of = '2031-07-14'\nzone = 'Europe/Paris'").as_of.instant, at(7, 14, 14));
}

TEST(Resolve, ZoneIsTheClockWhateverTheOffsetOfTheAsOf) {
  const auto night = resolved("as_of = '2031-03-14T16:00:00-05:00'\nzone = 'Europe/Paris'");
  EXPECT_EQ(night.as_of.instant, at(3, 14, 21));
  EXPECT_EQ(night.as_of.clock.zone, "Europe/Paris");
}

TEST(Resolve, MissingOrBrokenAsOfIsUsage) {
  EXPECT_EQ(unresolved(""), Fault::usage);
  EXPECT_EQ(unresolved("as_of = 'yesterday'"), Fault::usage);
  EXPECT_EQ(unresolved("as_of = '2031-02-30'"), Fault::usage);
}

TEST(Resolve, UnknownZoneIsConfiguration) {
  EXPECT_EQ(unresolved("as_of = '2031-03-14'\nzone = 'Nowhere/Town'"), Fault::configuration);
}

TEST(Resolve, SettlementTimesAreReadAndFolded) {
  const auto night =
      resolved("as_of = '2031-03-14'\nsettlement_times = {AM = '09:30', pm = '16:15'}");
  EXPECT_EQ(night.times.settlement_times.at("am"), 9h + 30min);
  EXPECT_EQ(night.times.settlement_times.at("pm"), 16h + 15min);
  EXPECT_EQ(unresolved("as_of = '2031-03-14'\nsettlement_times = {am = '25:00'}"),
            Fault::configuration);
}

TEST(Resolve, NoRatesIsNoCurve) { EXPECT_FALSE(resolved("as_of = '2031-03-14'").curve); }

TEST(Resolve, RatesByTenorAndByDateStandAtTheirTimes) {
  const auto night =
      resolved("as_of = '2031-03-14T16:00:00-05:00'\n[rates]\n3M = 0.03\n2032-03-13 = 0.04\n");
  ASSERT_TRUE(night.curve);
  EXPECT_EQ(night.curve->rate(market::year_fraction(at(3, 14, 21), at(6, 14, 21))), 0.03);
  // 365 days, at 16:00 of the as-of's own offset.
  EXPECT_EQ(night.curve->rate(1), 0.04);
}

TEST(Resolve, DiscountFactorsAreZeroRatesOfTheSameCurve) {
  const auto night =
      resolved("as_of = '2031-03-14'\nrates = {1Y = 0.04}\ndiscount_factors = {2Y = 0.9}\n");
  ASSERT_TRUE(night.curve);
  const auto as_of = at(3, 14, 16);
  const double two_years = market::year_fraction(as_of, as_of + std::chrono::days{731});
  // A logarithm, a division and an exponential: relative.
  constexpr double kRounding = 1e-15;
  EXPECT_NEAR(night.curve->discount_factor(two_years), 0.9, kRounding);
}

TEST(Resolve, RatesThatMakeNoCurveAreConfiguration) {
  const std::string as_of = "as_of = '2031-03-14'\n";
  for (const char* table : {
           "rates = {soon = 0.03}",
           "rates = {2031-03-14 = 0.03}",
           "rates = {2030-03-14 = 0.03}",
           "rates = {1Y = 3}",
           "rates = {1Y = 0.03, 12M = 0.03}",
           "discount_factors = {1Y = 0}",
           "discount_factors = {1Y = -0.9}",
           "rates = {1Y = 0.03}\ndiscount_factors = {1Y = 0.97}",
       })
    EXPECT_EQ(unresolved(as_of + table), Fault::configuration) << table;
}

TEST(Nearest, FewestEditsWin) {
  const std::vector<std::string> known{"widest", "stale_hours", "shortest_hours"};
  EXPECT_EQ(nearest("wides", known), "widest");
  EXPECT_EQ(nearest("shortest_hour", known), "shortest_hours");
  EXPECT_EQ(nearest("stale-hours", known), "stale_hours");
}

TEST(Nearest, WordFarFromAllHasNone) {
  EXPECT_EQ(nearest("zone", {"widest", "stale_hours"}), "");
  EXPECT_EQ(nearest("abc", {}), "");
}

}  // namespace
}  // namespace duskgrid::night
