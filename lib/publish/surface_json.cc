#include "publish/surface_json.h"

#include <fmt/format.h>

#include <cmath>
#include <nlohmann/json.hpp>

#include "market/day_count.h"

namespace duskgrid::publish {
namespace {

using nlohmann::ordered_json;

constexpr const char* kForm = "duskgrid-surface/2";
// Within which year_fraction is that of the dates: 0.03 seconds, far above the rounding of a
// division done another way.
constexpr double kSameYears = 1e-9;

struct Refusal {
  std::string why;
};

ordered_json slice_to_json(const surface::Slice& s, const quotes::Clock& clock) {
  ordered_json out;
  out["expiry"] = quotes::format_instant(clock, s.expiry);
  out["year_fraction"] = s.year_fraction;
  out["forward"] = s.forward;
  out["discount_factor"] = s.discount_factor;
  out["theta"] = s.backbone.theta;
  out["rho"] = s.backbone.rho;
  out["psi"] = s.backbone.psi;
  out["k_low"] = s.k_low;
  out["k_high"] = s.k_high;
  out["knots"] = s.overlay.knots;
  out["coefficients"] = s.overlay.coefficients;
  out["to_next"] = surface::word(s.to_next);
  return out;
}

const ordered_json& field(const ordered_json& in, const char* key) {
  if (!in.is_object()) throw Refusal{"is not an object"};
  const auto found = in.find(key);
  if (found == in.end()) throw Refusal{fmt::format("lacks `{}`", key)};
  return *found;
}

// The library would also make a number of true and false.
double number_of(const ordered_json& in, const char* key) {
  const auto& value = field(in, key);
  if (!value.is_number()) throw Refusal{fmt::format("`{}` is not a number", key)};
  return value.get<double>();
}

std::string text_of(const ordered_json& in, const char* key) {
  const auto& value = field(in, key);
  if (!value.is_string()) throw Refusal{fmt::format("`{}` is not a text", key)};
  return value.get<std::string>();
}

// A number, null or object would pass for a list of what it holds.
const ordered_json& list_of(const ordered_json& in, const char* key) {
  const auto& value = field(in, key);
  if (!value.is_array()) throw Refusal{fmt::format("`{}` is not a list", key)};
  return value;
}

std::vector<double> numbers_of(const ordered_json& in, const char* key) {
  std::vector<double> out;
  for (const auto& item : list_of(in, key)) {
    if (!item.is_number()) throw Refusal{fmt::format("`{}` holds what is not a number", key)};
    out.push_back(item.get<double>());
  }
  return out;
}

surface::Between rule_of(const ordered_json& in, const char* key) {
  const auto text = text_of(in, key);
  for (const auto rule : {surface::Between::variance, surface::Between::price})
    if (surface::word(rule) == text) return rule;
  throw Refusal{fmt::format("`{}` is neither variance nor price", key)};
}

quotes::AsOf as_of_of(const ordered_json& in) {
  const auto zone = text_of(in, "zone"), text = text_of(in, "as_of");
  if (quotes::Clock{zone, {}}.problem())
    throw Refusal{"`zone` is not a name of the IANA time zone database"};
  const auto as_of = quotes::parse_as_of(text, zone);
  if (!as_of) throw Refusal{"`as_of` is not an instant"};
  return *as_of;
}

quotes::Instant expiry_of(const ordered_json& in, const quotes::Clock& clock) {
  const auto cell = quotes::parse_date_cell(text_of(in, "expiry"));
  if (!cell) throw Refusal{"`expiry` is not an instant"};
  return quotes::resolve(*cell, clock, std::chrono::hours{16});
}

surface::Slice slice_from_json(const ordered_json& in, const quotes::Clock& clock) {
  const auto number = [&](const char* key) { return number_of(in, key); };
  surface::Slice s{};
  s.expiry = expiry_of(in, clock);
  s.year_fraction = number("year_fraction");
  s.forward = number("forward");
  s.discount_factor = number("discount_factor");
  s.backbone = {number("theta"), number("rho"), number("psi")};
  s.k_low = number("k_low");
  s.k_high = number("k_high");
  s.overlay = {numbers_of(in, "knots"), numbers_of(in, "coefficients")};
  s.to_next = rule_of(in, "to_next");
  return s;
}

std::vector<surface::Slice> slices_from_json(const ordered_json& in, const quotes::Clock& clock) {
  std::vector<surface::Slice> slices;
  for (const auto& item : list_of(in, "slices")) {
    try {
      slices.push_back(slice_from_json(item, clock));
    } catch (const Refusal& refusal) {
      throw Refusal{fmt::format("slice {}: {}", slices.size() + 1, refusal.why)};
    }
  }
  return slices;
}

StoredSurface stored_from_json(const ordered_json& in) {
  if (text_of(in, "form") != kForm) throw Refusal{fmt::format("`form` is not {}", kForm)};
  StoredSurface stored{as_of_of(in), {}};
  stored.surface.underlying = text_of(in, "underlying");
  if (!field(in, "spot").is_null()) stored.surface.spot = number_of(in, "spot");
  stored.surface.slices = slices_from_json(in, stored.as_of.clock);
  return stored;
}

bool positive(double v) { return std::isfinite(v) && v > 0; }

// What is wrong with a surface read, or empty.
std::string problem_of(const StoredSurface& stored) {
  const auto& surface = stored.surface;
  if (surface.slices.empty()) return "has no slice";
  if (surface.spot && !positive(*surface.spot)) return "spot must be > 0";
  double previous = 0;
  for (const auto& s : surface.slices) {
    if (!positive(s.year_fraction) || s.year_fraction <= previous)
      return "year_fraction must be > 0 and increase from slice to slice";
    const double years = market::year_fraction(stored.as_of.instant, s.expiry);
    if (!(std::abs(s.year_fraction - years) <= kSameYears))
      return fmt::format("year_fraction is {}, but there are {} years from as_of to expiry",
                         s.year_fraction, years);
    if (!positive(s.forward) || !positive(s.discount_factor))
      return "forward and discount_factor must be > 0";
    if (!positive(s.backbone.theta) || !(std::abs(s.backbone.rho) < 1) || !(s.backbone.psi >= 0) ||
        !std::isfinite(s.backbone.psi))
      return "theta must be > 0, rho between -1 and 1, psi >= 0";
    if (!std::isfinite(s.k_low) || !std::isfinite(s.k_high) || s.k_low > s.k_high)
      return "k_low must not be above k_high";
    if (const auto problem = s.overlay.problem()) return *problem;
    previous = s.year_fraction;
  }
  return {};
}

}  // namespace

std::string surface_to_json(const StoredSurface& stored) {
  const auto& clock = stored.as_of.clock;
  ordered_json out;
  out["form"] = kForm;
  out["underlying"] = stored.surface.underlying;
  out["as_of"] = quotes::format_instant(clock, stored.as_of.instant);
  out["zone"] = clock.zone;
  out["spot"] = stored.surface.spot ? ordered_json(*stored.surface.spot) : ordered_json(nullptr);
  out["slices"] = ordered_json::array();
  for (const auto& s : stored.surface.slices) out["slices"].push_back(slice_to_json(s, clock));
  return out.dump(1) + "\n";
}

Result<StoredSurface> surface_from_json(std::string_view text, const std::string& where) {
  const auto refuse = [&](const std::string& why) {
    return Failure{Fault::not_quotes, where, "is not a stored surface: " + why};
  };
  try {
    auto stored = stored_from_json(ordered_json::parse(text));
    if (const auto problem = problem_of(stored); !problem.empty()) return refuse(problem);
    return stored;
  } catch (const nlohmann::json::parse_error& error) {
    return refuse(fmt::format("is not JSON (at byte {})", error.byte));
  } catch (const nlohmann::json::exception&) {
    return refuse("holds a number too large for a double");
  } catch (const Refusal& refusal) {
    return refuse(refusal.why);
  }
}

}  // namespace duskgrid::publish
