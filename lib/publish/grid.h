// A surface sampled at the nodes a risk system wants.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "market/dates.h"
#include "surface/surface.h"

namespace duskgrid::publish {

enum class Axis : std::uint8_t { strike, moneyness, log_moneyness, deviations, delta };
std::string_view word(Axis axis);
std::optional<Axis> parse_axis(std::string_view text);

enum class Support : std::uint8_t { carried, extrapolated, observed, interpolated };
std::string_view word(Support support);

// Of a point of a surface by itself, without the quotes: extrapolated outside the quoted range in
// strike (between two expiries drawn linearly between theirs) or time, else interpolated.
Support support_at(const surface::Surface& surface, double year_fraction, double k);

struct GridOptions {
  Axis axis = Axis::moneyness;
  // On the axis: strike in quote currency, K/F, ln(K/F), ln(K/F) over at-the-money total vol, or
  // forward call delta N(d1) in (0, 1). Empty takes the listed strikes on the strike axis and
  // default_points() on others.
  std::vector<double> points;
  // Beside the listed expiries.
  std::vector<market::Tenor> tenors;
  std::vector<std::string> tenor_words;  // as published, one a tenor
  std::optional<std::string> problem() const;
};
std::vector<double> default_points(Axis axis);

// What the grid must know of an underlying beside its surface.
struct GridInputs {
  quotes::Instant as_of;
  quotes::Clock clock;                      // for tenors
  std::vector<std::vector<double>> used_k;  // a slice: ln(K/F) of used quotes, increasing
  std::vector<double> listed_strikes;       // increasing
  bool carried = false;                     // the surface is an earlier night's
};

struct GridNode {
  quotes::Instant expiry;
  std::string tenor;  // empty at a listed expiry
  double year_fraction;
  double forward, discount_factor;
  double point;  // on the axis
  double strike;
  double vol;  // decimals a year
  Support support;
};

// Nodes by time (a listed expiry before a tenor of the same instant), then by strike. Every time
// has a node at k = 0, added when the points have none. A delta that the smile does not reach
// within 40 deviations, a node without a finite positive strike and volatility, and a tenor without
// a finite positive forward and discount factor, are left out.
std::vector<GridNode> sample_grid(const surface::Surface& surface, const GridInputs& inputs,
                                  const GridOptions& options);

// A node of a grid asked for again: what sample_grid() gives at this time, with this forward to it,
// for a point on the axis. Nothing where it would leave the node out.
struct NodeValue {
  double strike;
  double vol;  // decimals a year
};
std::optional<NodeValue> node_at(const surface::Surface& surface, double year_fraction,
                                 double forward, Axis axis, double point);

}  // namespace duskgrid::publish
