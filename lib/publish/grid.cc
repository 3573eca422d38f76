#include "publish/grid.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <boost/math/tools/toms748_solve.hpp>
#include <cmath>
#include <utility>

#include "market/day_count.h"
#include "pricing/black.h"

namespace duskgrid::publish {
namespace {

constexpr std::array<std::string_view, 5> kAxes{"strike", "moneyness", "log_moneyness",
                                                "deviations", "delta"};

// One time at which the surface is sampled.
struct When {
  quotes::Instant expiry;
  std::string tenor;
  double year_fraction;
  double forward, discount_factor;
  int slice;  // index when a listed expiry, else -1
};

bool positive(double v) { return std::isfinite(v) && v > 0; }

std::vector<When> times_of(const surface::Surface& surface, const GridInputs& inputs,
                           const GridOptions& options) {
  std::vector<When> times;
  for (std::size_t i = 0; i < surface.slices.size(); ++i) {
    const auto& s = surface.slices[i];
    times.push_back(
        {s.expiry, "", s.year_fraction, s.forward, s.discount_factor, static_cast<int>(i)});
  }
  for (std::size_t i = 0; i < options.tenors.size(); ++i) {
    const auto expiry = market::add_tenor(inputs.as_of, options.tenors[i], inputs.clock);
    const double t = market::year_fraction(inputs.as_of, expiry);
    if (!(t > 0)) continue;
    const auto carried = surface::carried_at(surface, t);
    // Growth carried on for centuries may leave the range of numbers.
    if (!positive(carried.forward) || !positive(carried.discount_factor)) continue;
    times.push_back(
        {expiry, options.tenor_words[i], t, carried.forward, carried.discount_factor, -1});
  }
  std::stable_sort(times.begin(), times.end(), [](const When& a, const When& b) {
    return std::pair(a.expiry, !a.tenor.empty()) < std::pair(b.expiry, !b.tenor.empty());
  });
  return times;
}

struct Node {
  double point, k;
};

// A smile at one time, asked in the coordinates of an axis.
class TimedAxis {
 public:
  TimedAxis(const surface::Surface& surface, const When& when, Axis axis)
      : smile_(surface, when.year_fraction),
        forward_(when.forward),
        axis_(axis),
        at_the_money_(total_vol(0)) {}

  double total_vol(double k) const { return std::sqrt(smile_.at(k).w); }

  std::optional<double> k_of(double point) const {
    switch (axis_) {
      case Axis::strike: return -pricing::log_moneyness_of_forward(forward_, point);
      case Axis::moneyness: return std::log(point);
      case Axis::log_moneyness: return point;
      case Axis::deviations: return point * at_the_money_;
      case Axis::delta: return k_of_delta(point);
    }
    return std::nullopt;
  }

  double point_of_forward() const {
    switch (axis_) {
      case Axis::strike: return forward_;
      case Axis::moneyness: return 1;
      case Axis::delta: return delta_at(0);
      default: return 0;
    }
  }

  // A strike asked for comes back as asked, not through its logarithm.
  double strike_of(const Node& node) const {
    if (node.k == 0) return forward_;
    return axis_ == Axis::strike ? node.point : forward_ * std::exp(node.k);
  }

 private:
  double delta_at(double k) const {
    const double s = total_vol(k);
    return pricing::normal_cdf(-k / s + 0.5 * s);
  }

  // N(d1) falls in k where there is no butterfly arbitrage (Fukasawa, Math. Finance 22, 2012).
  std::optional<double> k_of_delta(double delta) const {
    const double reach = 40 * at_the_money_;
    const auto miss = [&](double k) { return delta_at(k) - delta; };
    if (!(miss(-reach) > 0 && miss(reach) < 0)) return std::nullopt;
    std::uintmax_t most = 200;
    const auto [low, high] = boost::math::tools::toms748_solve(
        miss, -reach, reach, boost::math::tools::eps_tolerance<double>(50), most);
    return 0.5 * (low + high);
  }

  surface::TimedSmile smile_;
  double forward_;
  Axis axis_;
  double at_the_money_;
};

std::optional<Node> node_of(const TimedAxis& axis, double point) {
  // Closer to the forward than this a point is the node at k = 0: below any strike spacing.
  constexpr double kSame = 1e-12;
  const auto k = axis.k_of(point);
  if (!k || !std::isfinite(*k)) return std::nullopt;
  return Node{point, std::abs(*k) < kSame ? 0 : *k};
}

std::vector<Node> nodes_of(const TimedAxis& axis, const std::vector<double>& points) {
  std::vector<Node> nodes;
  for (const double point : points)
    if (const auto node = node_of(axis, point)) nodes.push_back(*node);
  if (std::none_of(nodes.begin(), nodes.end(), [](const Node& n) { return n.k == 0; }))
    nodes.push_back({axis.point_of_forward(), 0});
  std::sort(nodes.begin(), nodes.end(), [](const Node& a, const Node& b) { return a.k < b.k; });
  const auto same = [](const Node& a, const Node& b) { return a.k == b.k; };
  nodes.erase(std::unique(nodes.begin(), nodes.end(), same), nodes.end());
  return nodes;
}

std::optional<NodeValue> value_of(const TimedAxis& axis, double year_fraction, const Node& node) {
  const NodeValue value{axis.strike_of(node), axis.total_vol(node.k) / std::sqrt(year_fraction)};
  if (!positive(value.vol) || !positive(value.strike)) return std::nullopt;
  return value;
}

// Half way to the neighbours; an end node reaches as far out as in, a lone node everywhere.
std::pair<double, double> cell_of(const std::vector<Node>& nodes, std::size_t i) {
  constexpr double kEverywhere = HUGE_VAL;
  const double k = nodes[i].k;
  const double below = i > 0 ? 0.5 * (k - nodes[i - 1].k) : kEverywhere;
  const double above = i + 1 < nodes.size() ? 0.5 * (nodes[i + 1].k - k) : kEverywhere;
  return {k - (i > 0 ? below : above), k + (i + 1 < nodes.size() ? above : below)};
}

bool quoted_within(const std::vector<double>& used_k, std::pair<double, double> cell) {
  const auto next = std::upper_bound(used_k.begin(), used_k.end(), cell.first);
  return next != used_k.end() && *next < cell.second;
}

// The quoted range of strikes at any time: the slice's own, between slices drawn linearly.
std::pair<double, double> quoted_range(const surface::Surface& surface, double year_fraction) {
  const auto& slices = surface.slices;
  const auto next =
      std::lower_bound(slices.begin(), slices.end(), year_fraction,
                       [](const surface::Slice& s, double t) { return s.year_fraction < t; });
  if (next == slices.end()) return {slices.back().k_low, slices.back().k_high};
  if (next == slices.begin() || next->year_fraction == year_fraction)
    return {next->k_low, next->k_high};
  const auto& a = *(next - 1);
  const double weight = (year_fraction - a.year_fraction) / (next->year_fraction - a.year_fraction);
  return {std::lerp(a.k_low, next->k_low, weight), std::lerp(a.k_high, next->k_high, weight)};
}

Support support_of(const surface::Surface& surface, const GridInputs& inputs, const When& when,
                   const std::vector<Node>& nodes, std::size_t i) {
  if (inputs.carried) return Support::carried;
  const Support alone = support_at(surface, when.year_fraction, nodes[i].k);
  const bool observed = alone == Support::interpolated && when.slice >= 0 &&
                        quoted_within(inputs.used_k[when.slice], cell_of(nodes, i));
  return observed ? Support::observed : alone;
}

}  // namespace

std::string_view word(Axis axis) { return kAxes[static_cast<std::size_t>(axis)]; }

std::optional<Axis> parse_axis(std::string_view text) {
  for (std::size_t i = 0; i < kAxes.size(); ++i)
    if (kAxes[i] == text) return static_cast<Axis>(i);
  return std::nullopt;
}

std::string_view word(Support support) {
  constexpr std::array<std::string_view, 4> kWords{"carried", "extrapolated", "observed",
                                                   "interpolated"};
  return kWords[static_cast<std::size_t>(support)];
}

Support support_at(const surface::Surface& surface, double year_fraction, double k) {
  const auto [low, high] = quoted_range(surface, year_fraction);
  const bool outside_time = year_fraction < surface.slices.front().year_fraction ||
                            year_fraction > surface.slices.back().year_fraction;
  const bool inside = !outside_time && k >= low && k <= high;
  return inside ? Support::interpolated : Support::extrapolated;
}

std::vector<double> default_points(Axis axis) {
  switch (axis) {
    case Axis::strike: return {};
    case Axis::moneyness:
      return {0.5, 0.6, 0.7, 0.8, 0.85, 0.9, 0.95, 0.975, 1, 1.025, 1.05, 1.1, 1.15, 1.2, 1.3, 1.5};
    case Axis::log_moneyness: return {-0.5, -0.3, -0.2, -0.1, -0.05, 0, 0.05, 0.1, 0.2, 0.3, 0.5};
    case Axis::deviations: return {-5, -4, -3, -2, -1.5, -1, -0.5, 0, 0.5, 1, 1.5, 2, 3};
    case Axis::delta: return {0.1, 0.2, 0.25, 0.3, 0.4, 0.5, 0.6, 0.7, 0.75, 0.8, 0.9};
  }
  return {};
}

std::optional<std::string> GridOptions::problem() const {
  constexpr std::size_t kMostPoints = 2000;
  if (points.size() > kMostPoints)
    return fmt::format("points has {} numbers, must be at most {}", points.size(), kMostPoints);
  const bool positive = axis == Axis::strike || axis == Axis::moneyness || axis == Axis::delta;
  for (const double p : points) {
    if (!std::isfinite(p) || (positive && p <= 0) || (axis == Axis::delta && p >= 1))
      return fmt::format("points has {}, must be {} on the {} axis", p,
                         axis == Axis::delta ? "between 0 and 1"
                         : positive          ? "> 0"
                                             : "finite",
                         word(axis));
    constexpr double kMostMoneyness = 20;
    if (axis == Axis::moneyness && p > kMostMoneyness)
      return fmt::format("points has {}, must be K/F: 0.9 and not 90 on the moneyness axis", p);
  }
  return std::nullopt;
}

std::vector<GridNode> sample_grid(const surface::Surface& surface, const GridInputs& inputs,
                                  const GridOptions& options) {
  std::vector<double> points = options.points;
  if (points.empty())
    points = options.axis == Axis::strike ? inputs.listed_strikes : default_points(options.axis);
  std::vector<GridNode> grid;
  for (const When& when : times_of(surface, inputs, options)) {
    const TimedAxis axis(surface, when, options.axis);
    const auto nodes = nodes_of(axis, points);
    for (std::size_t i = 0; i < nodes.size(); ++i) {
      const auto value = value_of(axis, when.year_fraction, nodes[i]);
      if (!value) continue;
      grid.push_back({when.expiry, when.tenor, when.year_fraction, when.forward,
                      when.discount_factor, nodes[i].point, value->strike, value->vol,
                      support_of(surface, inputs, when, nodes, i)});
    }
  }
  return grid;
}

std::optional<NodeValue> node_at(const surface::Surface& surface, double year_fraction,
                                 double forward, Axis axis, double point) {
  const TimedAxis timed(surface, {{}, {}, year_fraction, forward, 1, -1}, axis);
  const auto node = node_of(timed, point);
  return node ? value_of(timed, year_fraction, *node) : std::nullopt;
}

}  // namespace duskgrid::publish
