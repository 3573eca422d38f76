// Hostile configurations: mutated at random they must give a failure that says something, or
// options that keep their promises and a night that resolves or says why not. The seed of
// each run is its number, printed when it fails.
#include <gtest/gtest.h>

#include <nlohmann/json.hpp>

#include "mutate.h"
#include "night/config.h"

namespace duskgrid::night {
namespace {

const std::vector<std::string>& seed_texts() {
  static const std::vector<std::string> kTexts{
      "as_of = '2031-03-14T16:00:00-05:00'\nzone = 'Europe/Paris'\nspot = 100\n"
      "settlement_times = {am = '09:30', pm = '16:00'}\nrates = {3M = 0.03, 2032-03-14 = 0.04}\n"
      "discount_factors = {2Y = 0.93}\n"
      "[[source]]\nfiles = ['a.csv', 'b/*.csv']\nlayout = 'call-put-per-row'\ndelimiter = ';'\n"
      "decimal = ','\nthousands = '.'\ndate_format = '%d.%m.%Y'\nnull_words = ['x']\n"
      "strike_scale = 0.5\nhalf_spread = 0.05\ncolumns = {bid = 'Geld'}\nfixed = {expiry = "
      "'20310620'}\n"
      "[[source]]\nfiles = 'c.csv'\nexercise = 'american'\n",
      "as_of = '20310314'\n[underlying.HALYRD]\nspot = 99\ncarry = -0.01\nexercise = 'european'\n"
      "forwards = {2031-06-20 = 100.5, '2031-06-20T09:30:00Z' = 100.25}\n"
      "[underlying.'=K.1']\nspot = 7\n[clean]\nshortest_hours = 2\nwidest = 1\nstale_hours = 0\n"
      "[parity]\nrate_tolerance_given = 0.001\nnear_deviations = 0.5\nmost_near_pairs = 7\n"
      "[selection]\nfar_deviations = 4\nmost_quotes = 40\noutlier_half_spreads = 3\n"
      "[backbone]\nhuber_half_spreads = 2\nleast_half_spread = 0.0002\nmost_iterations = 50\n"
      "[grid]\naxis = 'delta'\npoints = [0.25, 0.5]\ntenors = ['1M', '2Y']\n"
      "[flags]\nmost_missed = 0.25\n",
      "as_of = '2031-03-14'\nrates = {999Y = 0.01, 1D = -0.5}\n[grid]\npoints = [1]\n",
  };
  return kTexts;
}

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "'",
                                                 "'''",
                                                 "\n",
                                                 "\r",
                                                 "[",
                                                 "[[",
                                                 "]",
                                                 "{",
                                                 "}",
                                                 "=",
                                                 ".",
                                                 ",",
                                                 "#",
                                                 "0",
                                                 "-1",
                                                 "nan",
                                                 "-inf",
                                                 "1e999",
                                                 "1e-320",
                                                 "9223372036854775807",
                                                 "9223372036854775808",
                                                 "0x1F",
                                                 "true",
                                                 "2031-02-30",
                                                 "2031-03-14T16:00:00Z",
                                                 "999Y",
                                                 "[source]",
                                                 "[[grid]]",
                                                 "\\u0000",
                                                 "\xFF",
                                                 "\xC3",
                                                 "\xEF\xBB\xBF",
                                                 std::string(1, '\0'),
                                                 std::string(300, '9'),
                                                 std::string(300, '['),
                                                 std::string(300, 'a'),
                                                 "strike = 1\n",
                                                 "a.b.c = 1\n"};
  return kMorsels;
}

void check_failure(const Failure& failure) {
  EXPECT_TRUE(failure.fault == Fault::configuration || failure.fault == Fault::usage);
  EXPECT_FALSE(failure.detail.empty());
}

// What the readers of a configuration rely on.
void check_config(const NightConfig& config) {
  EXPECT_EQ(config.clean.problem(), std::nullopt);
  EXPECT_EQ(config.parity.problem(), std::nullopt);
  EXPECT_EQ(config.selection.problem(), std::nullopt);
  EXPECT_EQ(config.backbone.problem(), std::nullopt);
  EXPECT_EQ(config.grid.problem(), std::nullopt);
  EXPECT_EQ(config.grid.tenors.size(), config.grid.tenor_words.size());
  for (const auto& source : config.sources) EXPECT_EQ(source.problem(), std::nullopt);
  EXPECT_GT(config.spot.value_or(1), 0);
  for (const auto& [name, facts] : config.underlyings) EXPECT_GT(facts.spot.value_or(1), 0);
  EXPECT_TRUE(nlohmann::json::accept(config_to_json(config)));
}

void check_night(const NightConfig& config) {
  const auto night = resolve(config);
  if (!night) return check_failure(night.failure());
  EXPECT_EQ(night->as_of.clock.problem(), std::nullopt);
  if (!night->curve) return;
  for (const double t : {1e-9, 0.25, 1.0, 30.0, 1000.0})
    EXPECT_TRUE(std::isfinite(night->curve->rate(t))) << t;
}

TEST(FuzzConfig, MutatedTextsGiveAFailureOrOptionsWithinTheirRanges) {
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const std::string text = mutator.mutate(seed_texts());
    const auto config = parse_config(text, "night.toml", "folder");
    if (config) {
      check_config(*config);
      check_night(*config);
      ++taken;
    } else {
      check_failure(config.failure());
      EXPECT_TRUE(config.failure().where.starts_with("night.toml"));
    }
    ASSERT_FALSE(HasFailure()) << "run " << run << ":\n" << text;
  }
  // Both ends of the reader must have been met, or the runs showed nothing.
  EXPECT_GT(taken, fuzz::runs() / 20);
  EXPECT_LT(taken, fuzz::runs());
}

}  // namespace
}  // namespace duskgrid::night
