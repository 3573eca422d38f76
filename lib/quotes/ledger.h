// The closed list of what can become of a quote: one state, and unless used, one
// reason. The table in ledger.cc is the only list; docs/formats.md is checked
// against it by a test.
#pragma once

#include <array>
#include <cstdint>
#include <span>
#include <string_view>

namespace duskgrid::quotes {

enum class State : std::uint8_t { used, spare, dropped };

enum class Reason : std::uint8_t {
  none,  // of used quotes only
  in_the_money,
  far_wing,
  thinned,
  immediate_exercise,  // spare
  unreadable,
  expired,
  too_short,
  no_bid,
  no_ask,
  crossed,
  wide,  // dropped
  below_intrinsic,
  above_bound,
  duplicate,
  stale,
  non_standard,
  outlier,
  no_forward,
  no_vol,
};
inline constexpr std::size_t kReasonCount = 20;

struct ReasonEntry {
  Reason reason;
  State state;
  std::string_view word;     // as written in ledger.csv and run.json; empty for none
  std::string_view meaning;  // one line, for the manual
};

// All reasons in the order of the enumeration.
std::span<const ReasonEntry, kReasonCount> reasons();
std::string_view word(State state);
std::string_view word(Reason reason);
// The state that a reason implies; `used` for Reason::none.
State state_of(Reason reason);

// How many contracts ended how. add() keeps used + spare + dropped equal to read.
struct LedgerCounts {
  std::int64_t read = 0, used = 0, spare = 0, dropped = 0;
  std::array<std::int64_t, kReasonCount> by_reason{};
  void add(Reason reason);
  void add(const LedgerCounts& other);
  // True when the states, and the reasons, each add up to the rows read.
  bool adds_up() const;
};

}  // namespace duskgrid::quotes
