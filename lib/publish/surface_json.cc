#include "publish/surface_json.h"

#include <cmath>
#include <nlohmann/json.hpp>

namespace duskgrid::publish {
namespace {

using nlohmann::ordered_json;

constexpr const char* kForm = "duskgrid-surface/2";

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

// The library would also make a number of true and false.
double number_of(const ordered_json& in) {
  return in.is_number() ? in.get<double>() : quotes::kAbsent;
}

// A number, null or object would pass for a list of what it holds.
std::vector<double> numbers_of(const ordered_json& in, const char* key) {
  if (!in.at(key).is_array()) throw Refusal{std::string(key) + " is not a list"};
  std::vector<double> out;
  for (const auto& item : in.at(key)) out.push_back(number_of(item));
  return out;
}

surface::Between rule_of(const ordered_json& in) {
  const auto text = in.get<std::string>();
  for (const auto rule : {surface::Between::variance, surface::Between::price})
    if (surface::word(rule) == text) return rule;
  throw Refusal{"to_next is neither variance nor price"};
}

surface::Slice slice_from_json(const ordered_json& in, const quotes::Clock& clock) {
  const auto number = [&](const char* key) { return number_of(in.at(key)); };
  surface::Slice s{};
  const auto cell = quotes::parse_date_cell(in.at("expiry").get<std::string>());
  s.expiry = cell ? quotes::resolve(*cell, clock, std::chrono::hours{16}) : quotes::kNoInstant;
  s.year_fraction = number("year_fraction");
  s.forward = number("forward");
  s.discount_factor = number("discount_factor");
  s.backbone = {number("theta"), number("rho"), number("psi")};
  s.k_low = number("k_low");
  s.k_high = number("k_high");
  s.overlay = {numbers_of(in, "knots"), numbers_of(in, "coefficients")};
  s.to_next = rule_of(in.at("to_next"));
  return s;
}

bool positive(double v) { return std::isfinite(v) && v > 0; }

// What is wrong with a surface read, or empty.
std::string problem_of(const surface::Surface& surface) {
  if (surface.slices.empty()) return "has no slice";
  if (surface.spot && !positive(*surface.spot)) return "spot must be > 0";
  double previous = 0;
  for (const auto& s : surface.slices) {
    if (s.expiry == quotes::kNoInstant) return "an expiry is not an instant";
    if (!positive(s.year_fraction) || s.year_fraction <= previous)
      return "year_fraction must be > 0 and increase from slice to slice";
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
    const auto in = ordered_json::parse(text);
    if (in.at("form").get<std::string>() != kForm)
      return refuse("form is not " + std::string(kForm));
    auto as_of = quotes::parse_as_of(in.at("as_of").get<std::string>(), "");
    if (!as_of) return refuse(as_of.failure().text());
    StoredSurface stored{*as_of, {}};
    stored.surface.underlying = in.at("underlying").get<std::string>();
    if (!in.at("spot").is_null()) stored.surface.spot = number_of(in.at("spot"));
    for (const auto& s : in.at("slices"))
      stored.surface.slices.push_back(slice_from_json(s, as_of->clock));
    if (const auto problem = problem_of(stored.surface); !problem.empty()) return refuse(problem);
    return stored;
  } catch (const nlohmann::json::exception& error) {
    return refuse(error.what());
  } catch (const Refusal& refusal) {
    return refuse(refusal.why);
  }
}

}  // namespace duskgrid::publish
