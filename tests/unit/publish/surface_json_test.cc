#include "publish/surface_json.h"

#include <gtest/gtest.h>

#include <algorithm>
#include <bit>
#include <cmath>
#include <limits>
#include <random>

#include "market/day_count.h"

namespace duskgrid::publish {
namespace {

using Limits = std::numeric_limits<double>;
using namespace std::chrono_literals;

const quotes::Instant kInstant = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
const quotes::AsOf kAsOf{kInstant, {"", std::chrono::minutes{-300}}};

surface::Slice slice(std::chrono::seconds ahead, double forward, double discount,
                     surface::SliceParameters backbone, double k_low, double k_high) {
  const auto expiry = kInstant + ahead;
  return {expiry, market::year_fraction(kInstant, expiry), forward, discount, backbone, k_low,
          k_high};
}

surface::Surface made() {
  return {"HALYRD",
          100.25,
          {slice(2400h, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2),
           slice(9000h + 7s, 1.0 / 3, 0.97, {0.03, 0.25, 0}, -0.5, -0.5)}};
}

// With everything that a fit may add.
surface::Surface fitted() {
  auto surface = made();
  surface.slices[0].overlay = {{-0.3, -0.2, -0.1, 1.0 / 30, 0.1, 0.2},
                               {0.001, -1.0 / 3000, 0, 0.0005}};
  surface.slices[0].to_next = surface::Between::price;
  surface.slices[1].to_next = surface::Between::price;
  return surface;
}

std::string text_of(const surface::Surface& surface) { return surface_to_json({kAsOf, surface}); }

// The bits of everything a slice holds.
std::vector<std::uint64_t> bits_of(const surface::Slice& s) {
  std::vector<std::uint64_t> bits{static_cast<std::uint64_t>(s.expiry.time_since_epoch().count())};
  for (const double v : {s.year_fraction, s.forward, s.discount_factor, s.backbone.theta,
                         s.backbone.rho, s.backbone.psi, s.k_low, s.k_high})
    bits.push_back(std::bit_cast<std::uint64_t>(v));
  for (const auto& list : {s.overlay.knots, s.overlay.coefficients}) {
    bits.push_back(list.size());
    for (const double v : list) bits.push_back(std::bit_cast<std::uint64_t>(v));
  }
  bits.push_back(static_cast<std::uint64_t>(s.to_next));
  return bits;
}

void expect_reloads(const surface::Surface& surface) {
  const auto stored = surface_from_json(text_of(surface), "memory");
  ASSERT_TRUE(stored.ok()) << stored.failure().text();
  EXPECT_EQ(stored->as_of.instant, kAsOf.instant);
  EXPECT_EQ(stored->as_of.clock.offset, kAsOf.clock.offset);
  EXPECT_EQ(stored->surface.underlying, surface.underlying);
  ASSERT_EQ(stored->surface.spot.has_value(), surface.spot.has_value());
  EXPECT_EQ(std::bit_cast<std::uint64_t>(stored->surface.spot.value_or(0)),
            std::bit_cast<std::uint64_t>(surface.spot.value_or(0)));
  ASSERT_EQ(stored->surface.slices.size(), surface.slices.size());
  for (std::size_t i = 0; i < surface.slices.size(); ++i)
    EXPECT_EQ(bits_of(stored->surface.slices[i]), bits_of(surface.slices[i])) << "slice " << i;
}

TEST(SurfaceJson, SurfaceReloadsBitForBit) { expect_reloads(made()); }

TEST(SurfaceJson, OverlaysAndRulesReloadBitForBit) {
  expect_reloads(fitted());
  auto surface = fitted();
  std::swap(surface.slices[0].overlay, surface.slices[1].overlay);
  surface.slices[0].to_next = surface::Between::variance;
  expect_reloads(surface);
}

TEST(SurfaceJson, ReloadedSurfaceHasTheSameSmiles) {
  const auto surface = fitted();
  const auto stored = surface_from_json(text_of(surface), "memory");
  ASSERT_TRUE(stored.ok());
  for (const double t : {0.1, 0.3, 0.7, 1.03, 1.2, 2.0})
    for (const double k : {-0.4, -0.15, 0.0, 0.12}) {
      const auto was = surface::point_at(surface, k, t);
      const auto is = surface::point_at(stored->surface, k, t);
      EXPECT_EQ(std::bit_cast<std::uint64_t>(is.w), std::bit_cast<std::uint64_t>(was.w));
      EXPECT_EQ(std::bit_cast<std::uint64_t>(is.d2w_dk2),
                std::bit_cast<std::uint64_t>(was.d2w_dk2));
    }
}

TEST(SurfaceJson, SurfaceWithoutASpotReloads) {
  auto surface = made();
  surface.spot.reset();
  expect_reloads(surface);
}

TEST(SurfaceJson, ExtremeDoublesReload) {
  auto surface = made();
  auto& first = surface.slices[0];
  auto& last = surface.slices[1];
  first.forward = Limits::max();
  first.discount_factor = Limits::min();
  first.backbone = {Limits::denorm_min(), std::nextafter(-1.0, 0.0), Limits::max()};
  first.k_low = Limits::lowest();
  first.k_high = -0.0;
  last.backbone = {Limits::max(), std::nextafter(1.0, 0.0), Limits::denorm_min()};
  last.k_low = last.k_high = Limits::max();
  expect_reloads(surface);
}

TEST(SurfaceJson, RandomDoublesReload) {
  constexpr std::uint64_t kSeed = 20310314;
  std::mt19937_64 random(kSeed);
  const auto any_positive = [&] {
    double v = 0;
    while (!(std::isfinite(v) && v > 0)) v = std::bit_cast<double>(random() >> 1);
    return v;
  };
  std::uniform_real_distribution<double> unit(-1, 1);
  for (int i = 0; i < 2000; ++i) {
    auto surface = made();
    surface.slices.pop_back();
    auto& s = surface.slices[0];
    surface.spot = any_positive();
    constexpr std::int64_t kMostSeconds = 5'000'000'000;  // 158 years
    s.expiry =
        kInstant + std::chrono::seconds{1 + static_cast<std::int64_t>(random() % kMostSeconds)};
    s.year_fraction = market::year_fraction(kInstant, s.expiry);
    s.forward = any_positive();
    s.discount_factor = any_positive();
    s.backbone = {any_positive(), unit(random), any_positive()};
    s.k_low = -any_positive();
    s.k_high = any_positive();
    std::vector<double> knots(8);
    for (double& knot : knots) knot = (unit(random) < 0 ? -1 : 1) * any_positive();
    std::sort(knots.begin(), knots.end());
    s.overlay = {knots, {any_positive(), -any_positive(), unit(random), 0, -0.0, 1}};
    expect_reloads(surface);
    if (HasFailure()) FAIL() << "seed " << kSeed << ", case " << i;
  }
}

// Arbitrage is not for the reader to judge, nor that the variance ends at some strikes.
TEST(SurfaceJson, OverlaysThatNoFitGivesReload) {
  auto surface = fitted();
  for (auto& slice : surface.slices)
    slice.overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {-1, 1, -1e300, Limits::max()}};
  expect_reloads(surface);
}

TEST(SurfaceJson, NamesNoFormatMindsReload) {
  auto surface = made();
  surface.underlying = "=\"K\\ELP/\xC3\xA9,\t'";
  expect_reloads(surface);
}

TEST(SurfaceJson, ZoneIsKeptAcrossAClockChange) {
  const quotes::AsOf as_of{kInstant, {"Europe/Paris", {}}};
  auto surface = made();
  surface.slices.resize(1);
  surface.slices[0] = slice(24h * 90, 101, 0.99, {0.01, -0.5, 0.15}, -0.3, 0.2);  // summer time
  const auto text = surface_to_json({as_of, surface});
  EXPECT_NE(text.find("\"zone\": \"Europe/Paris\""), std::string::npos) << text;
  const auto stored = surface_from_json(text, "memory");
  ASSERT_TRUE(stored.ok()) << stored.failure().text();
  EXPECT_EQ(stored->surface.slices.front().expiry, surface.slices.front().expiry);
  EXPECT_EQ(stored->as_of.instant, kInstant);
  EXPECT_EQ(stored->as_of.clock.zone, "Europe/Paris");
  EXPECT_EQ(surface_to_json(*stored), text);
}

TEST(SurfaceJson, WithoutAZoneTheOffsetIsKept) {
  const auto text = text_of(made());
  EXPECT_NE(text.find("\"zone\": \"\""), std::string::npos) << text;
  const auto stored = surface_from_json(text, "memory");
  ASSERT_TRUE(stored.ok());
  EXPECT_EQ(stored->as_of.clock.zone, "");
  EXPECT_EQ(stored->as_of.clock.offset, kAsOf.clock.offset);
}

// The text of made() with one piece replaced.
std::string broken(const std::string& piece, const std::string& by) {
  std::string text = text_of(made());
  const auto at = text.find(piece);
  EXPECT_NE(at, std::string::npos) << piece << " is not in " << text;
  return text.replace(at, piece.size(), by);
}

void expect_refused(const std::string& text, const std::string& holds = "") {
  const auto stored = surface_from_json(text, "halyrd.json");
  ASSERT_FALSE(stored.ok()) << text;
  EXPECT_EQ(stored.failure().fault, Fault::not_quotes);
  EXPECT_EQ(stored.failure().where, "halyrd.json");
  const std::string& detail = stored.failure().detail;
  EXPECT_FALSE(detail.empty());
  EXPECT_NE(detail.find(holds), std::string::npos) << detail;
  // In words of our own, not those of a library.
  for (const char* foreign : {"json.exception", "[json", "type_error", "syntax", "key '"})
    EXPECT_EQ(detail.find(foreign), std::string::npos) << detail;
}

TEST(SurfaceJson, TextThatIsNoJsonIsRefused) {
  for (const char* text : {"", "underlying,expiry\n", "{", "[]", "null", "3", "{}", "\xFF"})
    expect_refused(text);
  expect_refused(text_of(made()).substr(0, 200));
  expect_refused(text_of(made()) + "x");
  expect_refused("", "is not JSON (at byte 1)");
  expect_refused("{\"form\": x", "is not JSON (at byte 10)");
  expect_refused("[]", "is not an object");
  expect_refused(broken("100.25", "1e999"), "too large");
  expect_refused(std::string(100'000, '['));
}

TEST(SurfaceJson, OtherFormIsRefused) { expect_refused(broken("surface/2", "surface/1")); }

TEST(SurfaceJson, MissingFieldIsRefused) {
  for (const char* key : {"form", "underlying", "as_of", "zone", "spot", "slices", "expiry",
                          "year_fraction", "forward", "discount_factor", "theta", "rho", "psi",
                          "k_low", "k_high", "knots", "coefficients", "to_next"})
    expect_refused(broken("\"" + std::string(key) + "\"", "\"other\""),
                   "lacks `" + std::string(key) + "`");
  expect_refused(broken("\"rho\"", "\"other\""), "slice 1: lacks `rho`");
}

TEST(SurfaceJson, ValueOfAnotherKindIsRefused) {
  for (const char* other : {"null", "true", "\"0.99\"", "[]", "1e999"}) {
    expect_refused(broken("0.99", other));
    if (std::string(other) != "null") expect_refused(broken("100.25", other));
  }
  expect_refused(broken("\"HALYRD\"", "7"), "`underlying` is not a text");
  expect_refused(broken("\"rho\": -0.5", "\"rho\": \"-0.5\""), "slice 1: `rho` is not a number");
  expect_refused(broken("\"slices\": [", "\"slices\": 0, \"other\": ["), "`slices` is not a list");
  expect_refused(broken("\"zone\": \"\"", "\"zone\": null"), "`zone` is not a text");
  expect_refused(broken("\"zone\": \"\"", "\"zone\": \"Atlantis/Harbour\""), "`zone`");
}

// A number, null or object passed for a list of what it holds.
TEST(SurfaceJson, ListsAndRulesOfAnotherKindAreRefused) {
  for (const char* key : {"knots", "coefficients"})
    for (const char* other : {"null", "0", "\"\"", "{}", "[null]", "[true]", "[\"0\"]", "[[]]"}) {
      const std::string piece = "\"" + std::string(key) + "\": ";
      expect_refused(broken(piece + "[]", piece + other));
    }
  for (const char* other : {"null", "\"\"", "\"Price\"", "0", "[]"})
    expect_refused(broken("\"variance\"", other));
}

TEST(SurfaceJson, DatesThatAreNoneAreRefused) {
  expect_refused(broken("\"as_of\": \"2031-03-14", "\"as_of\": \"2031-02-30"));
  expect_refused(broken("\"expiry\": \"2031-", "\"expiry\": \"9031-"));
}

TEST(SurfaceJson, YearFractionThatIsNotThatOfTheDatesIsRefused) {
  for (const double off : {1e-8, -1e-8, 0.1}) {
    auto surface = made();
    surface.slices[0].year_fraction += off;
    expect_refused(text_of(surface), "years from as_of to expiry");
  }
  // Rounded to ten digits, as another program may write it.
  auto surface = made();
  surface.slices[0].year_fraction = std::round(surface.slices[0].year_fraction * 1e10) / 1e10;
  expect_reloads(surface);
}

surface::Surface with(auto change) {
  auto surface = made();
  change(surface);
  return surface;
}

TEST(SurfaceJson, ParametersNoSurfaceHasAreRefused) {
  using S = surface::Surface;
  const std::vector<surface::Surface> kBroken{
      with([](S& s) { s.slices.clear(); }),
      with([](S& s) { s.spot = 0; }),
      with([](S& s) { s.spot = -1; }),
      with([](S& s) { std::swap(s.slices[0], s.slices[1]); }),
      with([](S& s) { s.slices[1].year_fraction = s.slices[0].year_fraction; }),
      with([](S& s) { s.slices[0].year_fraction = 0; }),
      with([](S& s) { s.slices[0].expiry = quotes::kNoInstant; }),
      with([](S& s) { s.slices[0].forward = 0; }),
      with([](S& s) { s.slices[0].forward = -1; }),
      with([](S& s) { s.slices[0].discount_factor = 0; }),
      with([](S& s) { s.slices[0].backbone.theta = 0; }),
      with([](S& s) { s.slices[0].backbone.theta = -0.01; }),
      with([](S& s) { s.slices[0].backbone.rho = 1; }),
      with([](S& s) { s.slices[0].backbone.rho = -1; }),
      with([](S& s) { s.slices[0].backbone.rho = 1.5; }),
      with([](S& s) { s.slices[0].backbone.psi = -0.1; }),
      with([](S& s) { s.slices[0].k_low = 0.3; }),
      with([](S& s) { s.slices[0].forward = Limits::quiet_NaN(); }),
      with([](S& s) { s.slices[0].k_high = Limits::infinity(); }),
      with([](S& s) {
        s.slices[0].overlay = {{}, {0.1}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.3}, {0, 0.001, 0}};  // too few
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.2, 0.3}, {}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{}, {0, 0.001, 0.001, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.2, 0.3}, {0, 0.001, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.2, 0.3}, {0, 0, 0.001, 0, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0, 0.2, 0.3}, {0, 0.001, 0.001, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, 0, -0.1, 0.1, 0.2, 0.3}, {0, 0.001, 0.001, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.2, Limits::infinity()}, {0, 0.001, 0.001, 0}};
      }),
      with([](S& s) {
        s.slices[0].overlay = {{-0.3, -0.1, 0, 0.1, 0.2, 0.3}, {0, Limits::quiet_NaN(), 0, 0}};
      }),
  };
  for (std::size_t i = 0; i < kBroken.size(); ++i) {
    SCOPED_TRACE(i);
    expect_refused(text_of(kBroken[i]));
  }
}

}  // namespace
}  // namespace duskgrid::publish
