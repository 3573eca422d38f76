// A surface of an earlier night restated at tonight's times: what stands in for a name that cannot
// be marked. Not for whether it may: night/carry.h.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string_view>

#include "surface/surface.h"

namespace duskgrid::surface {

// An expiry of the old surface as it stands tonight.
struct CarriedExpiry {
  std::size_t slice;     // of the old surface
  double year_fraction;  // from tonight: > 0, at most that of the old slice
  double forward;        // tonight's, quote currency
  double discount_factor;
};

// What is held from night to night, at equal log-moneyness.
enum class CarryRule : std::uint8_t {
  // The volatility of a remaining time: the smile at t tonight is the old surface's at t, and the
  // surface as a whole is the old one, cut off at its last expiry. Free of arbitrage as the old one
  // is; but a smile between two old expiries is no hyperbola, and its restatement as backbone and
  // spline is only close.
  remaining_time,
  // The volatility of an expiry. Exact, and the expiries are free of arbitrage wherever the old
  // ones
  // were: total variances shrink by factors below 1 that grow from expiry to expiry, and with 0 <=
  // c
  // <= 1 Durrleman's g of c w is not below (1 - c) (1 - k w' / 2w)^2 + c g.
  own_expiry,
};
std::string_view word(CarryRule rule);

// Furthest that a restated smile may be from the old one, decimals of vol, from 5 at-the-money
// deviations below the forward to 5 above it.
inline constexpr double kMostRestated = 1e-4;

// Slices in the order given, which is by slice. Rules between slices are those of the old ones;
// with_proved_rules() has to be asked again. Nothing where no expiry is left, numbers are out of
// their ranges, or under remaining_time a smile is further than kMostRestated from the old one.
// Cost: some milliseconds a slice under remaining_time.
std::optional<Surface> carry_surface(const Surface& old, std::span<const CarriedExpiry> expiries,
                                     CarryRule rule);

}  // namespace duskgrid::surface
