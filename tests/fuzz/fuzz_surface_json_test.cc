// Hostile stored surfaces: mutated at random they must give a failure that says something, or a
// surface with parameters that a surface can have, which is stored and read again unchanged, and
// whose values are numbers or said not to be. The seed of each run is its number, printed when it
// fails.
#include <gtest/gtest.h>

#include <cmath>

#include "mutate.h"
#include "publish/surface_json.h"
#include "surface/derived.h"

namespace duskgrid::publish {
namespace {

using namespace std::chrono_literals;

const std::vector<std::string>& seed_texts() {
  static const std::vector<std::string> kTexts = [] {
    const quotes::Instant as_of = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
    const quotes::Clock clock{"", std::chrono::minutes{-300}};
    surface::Surface two{"HALYRD",
                         100.25,
                         {{as_of + 2628h, 0.3, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2},
                          {as_of + 8760h, 1, 104, 0.97, {0.04, 0.25, 0.2}, -0.5, 0.5}}};
    two.slices[0].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0.0002, 0.0005, -0.0005, 0.0003}};
    two.slices[0].to_next = surface::Between::price;
    two.slices[1].overlay = {{-0.5, -0.2, 0, 0.1, 0.3, 0.5, 0.6}, {0, 0.001, -0.001, 0.002, 0.001}};
    const surface::Surface one{
        "=K\"\xC3\xA9", {}, {{as_of + 24h, 1 / 365.0, 7, 1, {1e-5, 0, 0}, 0, 0}}};
    const quotes::AsOf night{as_of, clock}, zoned{as_of, {"Europe/Paris", {}}};
    std::vector<std::string> texts;
    for (const auto& when : {night, zoned})
      for (const auto& surface : {two, one}) {
        const StoredSurface stored{when, surface};
        texts.push_back(surface_to_json(stored));
      }
    return texts;
  }();
  return kTexts;
}

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "\\",
                                                 "{",
                                                 "}",
                                                 "[",
                                                 "]",
                                                 ":",
                                                 ",",
                                                 "null",
                                                 "true",
                                                 "\"x\"",
                                                 "0",
                                                 "-0.0",
                                                 "-1",
                                                 "1",
                                                 "1e999",
                                                 "-1e308",
                                                 "1.7976931348623157e308",
                                                 "5e-324",
                                                 "1e-320",
                                                 "0.99999999999999999",
                                                 "9223372036854775807",
                                                 "99999999999999999999",
                                                 "NaN",
                                                 "Infinity",
                                                 "\\u0000",
                                                 "\\ud800",
                                                 "\xFF",
                                                 "\xC3",
                                                 std::string(1, '\0'),
                                                 std::string(300, '9'),
                                                 std::string(300, '['),
                                                 "\"theta\": 1,",
                                                 "\"slices\": [],",
                                                 "[0.1, 0.2]",
                                                 "\"price\"",
                                                 "\"knots\": [],",
                                                 "\"coefficients\": [0, -1, 2, 0],",
                                                 "\"zone\": \"Asia/Tokyo\",",
                                                 "America/New_York"};
  return kMorsels;
}

bool positive(double v) { return std::isfinite(v) && v > 0; }

void check_surface(const surface::Surface& surface) {
  ASSERT_FALSE(surface.slices.empty());
  EXPECT_TRUE(positive(surface.spot.value_or(1)));
  double last = 0;
  for (const auto& s : surface.slices) {
    EXPECT_NE(s.expiry, quotes::kNoInstant);
    EXPECT_GT(s.year_fraction, last);
    last = s.year_fraction;
    EXPECT_TRUE(positive(s.year_fraction) && positive(s.forward) && positive(s.discount_factor));
    EXPECT_TRUE(positive(s.backbone.theta) && std::isfinite(s.backbone.psi));
    EXPECT_TRUE(s.backbone.psi >= 0 && std::abs(s.backbone.rho) < 1);
    EXPECT_TRUE(std::isfinite(s.k_low) && std::isfinite(s.k_high) && s.k_low <= s.k_high);
    EXPECT_EQ(s.overlay.problem(), std::nullopt);
  }
}

void check_values(const surface::Surface& surface) {
  for (const double t : {0.1, 0.3, 0.6, 1.5, 3.0}) {
    const surface::TimedSmile smile(surface, t);
    const auto carried = surface::carried_at(surface, t);
    for (const double k : {-40.0, -0.25, 0.0, 0.05, 3.0})
      if (const auto d = surface::derived_at(smile, carried, k)) {
        EXPECT_TRUE(positive(d->strike) && positive(d->vol));
        EXPECT_FALSE(std::isnan(d->price) || std::isnan(d->greeks.delta));
        EXPECT_TRUE(std::isfinite(d->density.value_or(0)));
        EXPECT_TRUE(std::isfinite(d->local_vol.value_or(0)));
      }
    if (const auto swap = surface::variance_swap(smile)) {
      EXPECT_TRUE(positive(swap->vol));
    }
  }
}

void check_stored(const StoredSurface& stored) {
  check_surface(stored.surface);
  EXPECT_EQ(stored.as_of.clock.problem(), std::nullopt);
  const std::string text = surface_to_json(stored);
  const auto again = surface_from_json(text, "again");
  ASSERT_TRUE(again.ok()) << again.failure().text();
  EXPECT_EQ(surface_to_json(*again), text);
}

TEST(FuzzSurfaceJson, MutatedTextsGiveAFailureOrASurfaceThatReloads) {
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const std::string text = mutator.mutate(seed_texts());
    const auto stored = surface_from_json(text, "halyrd.json");
    if (stored) {
      check_stored(*stored);
      check_values(stored->surface);
      ++taken;
    } else {
      EXPECT_EQ(stored.failure().fault, Fault::not_quotes);
      EXPECT_EQ(stored.failure().where, "halyrd.json");
      EXPECT_FALSE(stored.failure().detail.empty());
    }
    ASSERT_FALSE(HasFailure()) << "run " << run << ":\n" << text;
  }
  // Both ends of the reader must have been met, or the runs showed nothing.
  EXPECT_GT(taken, fuzz::runs() / 20);
  EXPECT_LT(taken, fuzz::runs());
}

}  // namespace
}  // namespace duskgrid::publish
