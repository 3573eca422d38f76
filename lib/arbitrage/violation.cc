#include "arbitrage/violation.h"

#include <fmt/format.h>

#include <array>

namespace duskgrid::arbitrage {

std::string_view word(Scope scope) { return scope == Scope::quotes ? "quotes" : "surface"; }

std::string_view word(Kind kind) {
  constexpr std::array<std::string_view, 7> kWords{"bounds", "vertical", "butterfly", "calendar",
                                                   "parity", "box",      "wing"};
  return kWords[static_cast<std::size_t>(kind)];
}

namespace {

std::string date_of(const Leg& leg, const quotes::Clock& clock) {
  return leg.expiry == quotes::kNoInstant ? fmt::format("t={:.6g}", leg.year_fraction)
                                          : quotes::format_date(clock, leg.expiry);
}

}  // namespace

std::string format_legs(const std::vector<Leg>& legs, const quotes::Clock& clock) {
  std::string out;
  for (const Leg& leg : legs) {
    if (!out.empty()) out += "; ";
    const auto date = date_of(leg, clock);
    if (leg.type == LegType::forward)
      out += fmt::format("{:+.6g} F {} @{:.10g}", leg.quantity, date, leg.strike);
    else
      out += fmt::format("{:+.6g} {} {:.10g} {} @{:.10g}", leg.quantity,
                         leg.type == LegType::call ? 'C' : 'P', leg.strike, date, leg.price);
  }
  return out;
}

}  // namespace duskgrid::arbitrage
