// Two nights side by side: how each node moved, what explains it, and which moves want a signature.
// Not for reading the nights: past_run.h, surface_json.h; the typical move comes from history.h.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "publish/expiries.h"
#include "publish/grid.h"
#include "publish/surface_json.h"

namespace duskgrid::publish {

struct CompareOptions {
  // Change of a node's volatility at equal log-moneyness, less roll-down, that wants a signature.
  // Decimals of vol, range: > 0. Smaller asks for more of them.
  double tolerance = 0.03;
  // The same in terms of the node's own past: so many times the median absolute change, from night
  // to night, of the underlying's at-the-money volatility at that time to expiry. Range: >= 0; 0
  // asks for none. Smaller asks for more.
  double times_typical = 8;
  // Furthest node that may want one, in at-the-money deviations from the forward. Range: > 0.
  // Beyond it a volatility of a short expiry swings with the wing, and little hangs on it.
  double deviations = 3;
  // Nights of the underlying that must be known for that. Range: >= 2.
  int least_nights = 10;
  // Nights before the older one of the two, itself included, that are looked at. Range: >= least.
  int most_nights = 20;
  std::optional<std::string> problem() const;
};

// Parts of a change of volatility from the old node to the new one, decimals a year. They add up to
// the change at equal strike; without `forward`, to the change at equal log-moneyness. Exact
// definitions: docs/methods.md, section 9.2.
struct ChangeParts {
  double forward;                 // along the old smile, as ln(K/F) of the strike moved
  double roll_down;               // along the old surface, as time to expiry went by
  double level, skew, curvature;  // of the surface itself, within one deviation of the forward
  double rest;                    // what those leave
};

enum class SignOff : std::uint8_t { none, tolerance, history, both };
std::string_view word(SignOff why);

struct NodeChange {
  GridNode node;   // the new one
  double k;        // ln(K/F) of it
  double vol_old;  // at equal log-moneyness
  double vol_old_at_strike;
  double change, change_at_strike;
  ChangeParts parts;
  double move;     // of the surface itself: change less roll_down
  bool near;       // within the deviations of the options
  double typical;  // the median named above, kAbsent where too few nights are known
  SignOff sign_off;
};

// What is known of the underlying's at-the-money volatilities, a night each, by time to expiry.
struct TermPoint {
  double year_fraction;
  double vol;  // decimals a year
};
using TermNights = std::vector<std::vector<TermPoint>>;
// Median absolute change from one night to the next of the volatility at `year_fraction` (total
// variance linear between the points, volatility flat outside them); kAbsent without two nights.
double typical_change(const TermNights& nights, double year_fraction);

// An underlying on one night.
struct ComparedSide {
  const StoredSurface* stored;      // none: no surface that night
  bool carried = false;             // its surface was an earlier night's
  bool in_files = true;             // whether the night knows the name at all
  std::vector<ExpiryPrint> prints;  // by expiry; may be empty
};

enum class ChangeState : std::uint8_t {
  compared,
  stale,    // compared, but quotes or surface are those of the night before
  carried,  // compared, but the new surface is carried
  new_underlying,
  vanished_underlying,  // the night before had a surface, and tonight does not know the name
  refused,              // the same, and tonight has the name but no surface
  new_expiry,
  vanished_expiry,  // lies ahead, and is not in the new surface
};
std::string_view word(ChangeState state);

struct UnderlyingChange {
  std::string underlying;
  // compared, stale, carried, new_underlying, vanished_underlying or refused.
  ChangeState state = ChangeState::compared;
  std::vector<quotes::Instant> new_expiries, vanished_expiries;
  std::vector<NodeChange> nodes;  // of expiries and tenors that both have, in their order

  std::int64_t to_sign_off() const;
  const NodeChange* largest() const;  // by move, of near nodes; none without
                                      // any
};

// `nodes` are those of the new surface's grid. A node of a listed expiry is compared with the old
// surface at the same expiry, one of a tenor at the same tenor. No surface on both sides gives
// nothing to say: state compared and no nodes.
UnderlyingChange compare_underlying(const std::string& underlying, const ComparedSide& before,
                                    const ComparedSide& now, std::span<const GridNode> nodes,
                                    const TermNights& past, const CompareOptions& options);

inline constexpr std::string_view kChangesHeader =
    "underlying,state,expiry,tenor,axis,point,strike,log_moneyness,vol_old,vol,change,"
    "change_at_strike,forward,roll_down,move,level,skew,curvature,rest,typical,sign_off\n";
// Lines of changes.csv, with their line feeds: what is new or gone, then the nodes.
std::string changes_lines(const UnderlyingChange& change, Axis axis, const quotes::Clock& clock);

}  // namespace duskgrid::publish
