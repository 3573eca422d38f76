#include "publish/compare.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <utility>

#include "market/dates.h"
#include "market/day_count.h"
#include "publish/tables.h"
#include "publish/text.h"

namespace duskgrid::publish {
namespace {

using surface::Surface;
using surface::TimedSmile;

double vol_of(const TimedSmile& smile, double k) {
  return std::sqrt(smile.at(k).w / smile.year_fraction());
}

// The change of the surface itself at one time, and its level, skew and curvature there.
class SurfaceMove {
 public:
  SurfaceMove(const TimedSmile& before, const TimedSmile& now) : before_(before), now_(now) {
    reach_ = std::sqrt(before.at(0).w);
    const double left = at(-reach_), right = at(reach_);
    level_ = at(0);
    slope_ = (right - left) / (2 * reach_);
    bend_ = (right - 2 * level_ + left) / (reach_ * reach_);
  }

  double deviations(double k) const { return std::abs(k) / reach_; }
  double at(double k) const { return vol_of(now_, k) - vol_of(before_, k); }
  // Beyond one deviation skew and curvature stay as they are there: a parabola carried into the
  // wings would explain nothing, and be taken back by the rest.
  void split(double k, ChangeParts& parts) const {
    const double near = std::clamp(k, -reach_, reach_);
    parts.level = level_;
    parts.skew = slope_ * near;
    parts.curvature = 0.5 * bend_ * near * near;
  }

 private:
  const TimedSmile &before_, &now_;
  double reach_, level_, slope_, bend_;
};

// The same expiry or tenor on both nights.
struct TimePair {
  double t_old;
  double forward_old;
};

bool same_time(const GridNode& a, const GridNode& b) {
  return a.expiry == b.expiry && a.tenor == b.tenor;
}

// The older night's surface at the same expiry or tenor, if it has it.
std::optional<TimePair> pair_of(const StoredSurface& before, const GridNode& node) {
  quotes::Instant expiry = node.expiry;
  if (!node.tenor.empty()) {
    const auto tenor = market::parse_tenor(node.tenor);
    if (!tenor) return std::nullopt;
    expiry = market::add_tenor(before.as_of.instant, *tenor, before.as_of.clock);
  } else {
    const auto& slices = before.surface.slices;
    const bool listed = std::any_of(slices.begin(), slices.end(),
                                    [&](const auto& s) { return s.expiry == expiry; });
    if (!listed) return std::nullopt;
  }
  const double t = market::year_fraction(before.as_of.instant, expiry);
  if (!(t > 0)) return std::nullopt;
  // At a listed expiry the slice's own bits.
  for (const auto& s : before.surface.slices)
    if (s.expiry == expiry) return TimePair{s.year_fraction, s.forward};
  return TimePair{t, surface::carried_at(before.surface, t).forward};
}

SignOff sign_off_of(const NodeChange& node, const CompareOptions& options) {
  if (!node.near) return SignOff::none;
  const double size = std::abs(node.move);
  const bool wide = !(size <= options.tolerance);
  const bool odd =
      options.times_typical > 0 && node.typical > 0 && size > options.times_typical * node.typical;
  if (wide) return odd ? SignOff::both : SignOff::tolerance;
  return odd ? SignOff::history : SignOff::none;
}

// All nodes at one time.
void compare_time(const StoredSurface& before, const StoredSurface& now,
                  std::span<const GridNode> nodes, double typical, const CompareOptions& options,
                  std::vector<NodeChange>& out) {
  const auto pair = pair_of(before, nodes.front());
  if (!pair) return;
  const double t = nodes.front().year_fraction;
  const TimedSmile old_then(before.surface, pair->t_old), old_now(before.surface, t),
      new_now(now.surface, t);
  const SurfaceMove move(old_now, new_now);
  for (const auto& node : nodes) {
    NodeChange change{node, std::log(node.strike / node.forward), 0, 0, 0, 0, {}, 0, false, typical,
                      {}};
    const double k = change.k;
    change.near = move.deviations(k) <= options.deviations;
    change.vol_old = vol_of(old_then, k);
    change.vol_old_at_strike = vol_of(old_then, std::log(node.strike / pair->forward_old));
    change.change = node.vol - change.vol_old;
    change.change_at_strike = node.vol - change.vol_old_at_strike;
    auto& parts = change.parts;
    parts.forward = change.vol_old - change.vol_old_at_strike;
    parts.roll_down = vol_of(old_now, k) - change.vol_old;
    move.split(k, parts);
    change.move = change.change - parts.roll_down;
    parts.rest = change.move - parts.level - parts.skew - parts.curvature;
    if (!std::isfinite(change.change_at_strike) || !std::isfinite(parts.rest)) continue;
    change.sign_off = sign_off_of(change, options);
    out.push_back(std::move(change));
  }
}

// Every expiry that lies ahead is on both nights with the same print, and there is one.
bool same_quotes(const ComparedSide& before, const ComparedSide& now, quotes::Instant as_of) {
  bool any = false;
  for (const auto& print : now.prints) {
    if (print.expiry <= as_of) continue;
    const auto found = std::find_if(before.prints.begin(), before.prints.end(),
                                    [&](const auto& p) { return p.expiry == print.expiry; });
    if (found == before.prints.end() || found->print != print.print) return false;
    any = true;
  }
  return any;
}

// Without prints: the same numbers, to the last digit, at every expiry that both have.
bool same_surface(const Surface& before, const Surface& now) {
  bool any = false;
  for (const auto& s : now.slices) {
    const auto found = std::find_if(before.slices.begin(), before.slices.end(),
                                    [&](const auto& o) { return o.expiry == s.expiry; });
    if (found == before.slices.end()) continue;
    const auto& o = *found;
    if (o.backbone.theta != s.backbone.theta || o.backbone.rho != s.backbone.rho ||
        o.backbone.psi != s.backbone.psi || o.overlay.coefficients != s.overlay.coefficients ||
        o.forward != s.forward)
      return false;
    any = true;
  }
  return any;
}

bool stale(const ComparedSide& before, const ComparedSide& now) {
  if (before.stored->as_of.instant == now.stored->as_of.instant) return false;
  if (!before.prints.empty() && !now.prints.empty())
    return same_quotes(before, now, now.stored->as_of.instant);
  return same_surface(before.stored->surface, now.stored->surface);
}

std::vector<quotes::Instant> missing_from(const Surface& other, const Surface& from,
                                          quotes::Instant after) {
  std::vector<quotes::Instant> out;
  for (const auto& s : from.slices) {
    const bool there = std::any_of(other.slices.begin(), other.slices.end(),
                                   [&](const auto& o) { return o.expiry == s.expiry; });
    if (!there && s.expiry > after) out.push_back(s.expiry);
  }
  return out;
}

// At-the-money volatility at a time, from points by time.
double vol_at(const std::vector<TermPoint>& points, double t) {
  const auto next = std::find_if(points.begin(), points.end(),
                                 [&](const auto& p) { return p.year_fraction >= t; });
  if (next == points.end()) return points.back().vol;
  if (next == points.begin()) return next->vol;
  const auto &a = *(next - 1), &b = *next;
  const double part = (t - a.year_fraction) / (b.year_fraction - a.year_fraction);
  const double w =
      std::lerp(a.vol * a.vol * a.year_fraction, b.vol * b.vol * b.year_fraction, part);
  return std::sqrt(w / t);
}

}  // namespace

std::optional<std::string> CompareOptions::problem() const {
  if (!(tolerance > 0)) return fmt::format("tolerance = {}, must be > 0", tolerance);
  if (!(times_typical >= 0)) return fmt::format("times_typical = {}, must be >= 0", times_typical);
  if (!(deviations > 0)) return fmt::format("deviations = {}, must be > 0", deviations);
  if (least_nights < 2) return fmt::format("least_nights = {}, must be >= 2", least_nights);
  if (most_nights < least_nights || most_nights > 1000)
    return fmt::format("most_nights = {}, must be least_nights to 1000", most_nights);
  return std::nullopt;
}

std::string_view word(SignOff why) {
  constexpr std::array<std::string_view, 4> kWords{"", "tolerance", "history", "both"};
  return kWords[static_cast<std::size_t>(why)];
}

std::string_view word(ChangeState state) {
  constexpr std::array<std::string_view, 8> kWords{
      "compared", "stale",      "carried",        "new-underlying", "vanished-underlying",
      "refused",  "new-expiry", "vanished-expiry"};
  return kWords[static_cast<std::size_t>(state)];
}

std::int64_t UnderlyingChange::to_sign_off() const {
  return std::count_if(nodes.begin(), nodes.end(),
                       [](const auto& n) { return n.sign_off != SignOff::none; });
}

const NodeChange* UnderlyingChange::largest() const {
  const NodeChange* most = nullptr;
  for (const auto& node : nodes)
    if (node.near && (!most || std::abs(node.move) > std::abs(most->move))) most = &node;
  return most;
}

double typical_change(const TermNights& nights, double t) {
  std::vector<double> moves;
  for (std::size_t i = 1; i < nights.size(); ++i)
    if (!nights[i - 1].empty() && !nights[i].empty())
      moves.push_back(std::abs(vol_at(nights[i], t) - vol_at(nights[i - 1], t)));
  if (moves.empty()) return quotes::kAbsent;
  std::sort(moves.begin(), moves.end());
  const std::size_t n = moves.size();
  return 0.5 * (moves[(n - 1) / 2] + moves[n / 2]);
}

UnderlyingChange compare_underlying(const std::string& underlying, const ComparedSide& before,
                                    const ComparedSide& now, std::span<const GridNode> nodes,
                                    const TermNights& past, const CompareOptions& options) {
  UnderlyingChange out;
  out.underlying = underlying;
  if (!before.stored && !now.stored) return out;
  if (!before.stored) {
    out.state = ChangeState::new_underlying;
    return out;
  }
  if (!now.stored) {
    out.state = now.in_files ? ChangeState::refused : ChangeState::vanished_underlying;
    return out;
  }
  if (now.carried)
    out.state = ChangeState::carried;
  else if (!before.carried && stale(before, now))
    out.state = ChangeState::stale;
  const auto& as_of = now.stored->as_of.instant;
  out.new_expiries = missing_from(before.stored->surface, now.stored->surface, as_of);
  out.vanished_expiries = missing_from(now.stored->surface, before.stored->surface, as_of);
  const bool known = static_cast<int>(past.size()) >= options.least_nights;
  for (std::size_t begin = 0, end = 0; begin < nodes.size(); begin = end) {
    while (end < nodes.size() && same_time(nodes[end], nodes[begin])) ++end;
    const double typical =
        known ? typical_change(past, nodes[begin].year_fraction) : quotes::kAbsent;
    compare_time(*before.stored, *now.stored, nodes.subspan(begin, end - begin), typical, options,
                 out.nodes);
  }
  return out;
}

std::string changes_lines(const UnderlyingChange& change, Axis axis, const quotes::Clock& clock) {
  InstantTexts instants(clock);
  const std::string name = csv_text(change.underlying);
  std::string out;
  constexpr int kOtherCells = 18;  // after the expiry
  // A change of volatilities by less is that of their last digits.
  constexpr double kRounding = 1e-15;
  const auto event = [&](ChangeState state, std::string_view expiry) {
    out += fmt::format("{},{},{}{:,>{}}\n", name, word(state), expiry, "", kOtherCells);
  };
  if (change.state >= ChangeState::new_underlying) event(change.state, "");
  for (const auto expiry : change.new_expiries) event(ChangeState::new_expiry, instants.of(expiry));
  for (const auto expiry : change.vanished_expiries)
    event(ChangeState::vanished_expiry, instants.of(expiry));
  for (const auto& n : change.nodes) {
    out += fmt::format("{},{},{},{},{}", name, word(change.state), instants.of(n.node.expiry),
                       n.node.tenor, word(axis));
    const auto& p = n.parts;
    for (const double value : {n.node.point, n.node.strike, n.k, n.vol_old, n.node.vol}) {
      out += ',';
      out += csv_number(value);
    }
    for (const double value : {n.change, n.change_at_strike, p.forward, p.roll_down, n.move,
                               p.level, p.skew, p.curvature, p.rest, n.typical}) {
      out += ',';
      out += csv_number(std::abs(value) < kRounding ? 0 : value);
    }
    out += fmt::format(",{}\n", word(n.sign_off));
  }
  return out;
}

}  // namespace duskgrid::publish
