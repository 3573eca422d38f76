#include "quotes/ledger.h"

#include <numeric>

namespace duskgrid::quotes {
namespace {

constexpr std::array<ReasonEntry, kReasonCount> kReasons{{
    {Reason::none, State::used, "", "in the fit"},
    {Reason::in_the_money, State::spare, "in-the-money",
     "sound, but no better than the side of the strike that is out of the money"},
    {Reason::far_wing, State::spare, "far-wing",
     "sound, but further from the money than the configured number of deviations"},
    {Reason::thinned, State::spare, "thinned",
     "sound, but the slice already has the configured number of quotes"},
    {Reason::immediate_exercise, State::spare, "immediate-exercise",
     "american, and its mid is no more than exercise now pays: no one volatility follows from it"},
    {Reason::unreadable, State::dropped, "unreadable",
     "the row, or a cell the contract needs, cannot be read"},
    {Reason::expired, State::dropped, "expired", "expires at or before the as-of instant"},
    {Reason::too_short, State::dropped, "too-short",
     "expires sooner than the configured shortest time"},
    {Reason::no_bid, State::dropped, "no-bid", "the bid is absent, zero or negative"},
    {Reason::no_ask, State::dropped, "no-ask", "the ask is absent, zero or negative"},
    {Reason::crossed, State::dropped, "crossed", "the bid is above the ask"},
    {Reason::wide, State::dropped, "wide",
     "the spread is more than the configured multiple of the mid"},
    {Reason::below_intrinsic, State::dropped, "below-intrinsic",
     "the ask is at or below intrinsic value: no volatility is that low"},
    {Reason::above_bound, State::dropped, "above-bound",
     "the bid, or the ask, is at or above the largest price any volatility gives"},
    {Reason::duplicate, State::dropped, "duplicate",
     "the same contract again; the latest, then the tightest, is kept"},
    {Reason::stale, State::dropped, "stale", "quoted longer before the as-of than configured"},
    {Reason::non_standard, State::dropped, "non-standard",
     "an adjusted contract: odd multiplier or a digit in the symbol's root"},
    {Reason::outlier, State::dropped, "outlier",
     "far outside its spread while its neighbours agree with one another"},
    {Reason::no_forward, State::dropped, "no-forward",
     "its expiry has no forward: none given, no spot, no usable call-put pair"},
    {Reason::no_vol, State::dropped, "no-vol",
     "american, and no volatility was found that explains its mid or its ask"},
}};

}  // namespace

std::span<const ReasonEntry, kReasonCount> reasons() { return kReasons; }

std::string_view word(State state) {
  constexpr std::array<std::string_view, 3> kWords{"used", "spare", "dropped"};
  return kWords[static_cast<std::size_t>(state)];
}

std::string_view word(Reason reason) { return kReasons[static_cast<std::size_t>(reason)].word; }

State state_of(Reason reason) { return kReasons[static_cast<std::size_t>(reason)].state; }

void LedgerCounts::add(Reason reason) {
  ++read;
  ++by_reason[static_cast<std::size_t>(reason)];
  switch (state_of(reason)) {
    case State::used: ++used; break;
    case State::spare: ++spare; break;
    case State::dropped: ++dropped; break;
  }
}

void LedgerCounts::add(const LedgerCounts& other) {
  read += other.read;
  used += other.used;
  spare += other.spare;
  dropped += other.dropped;
  for (std::size_t i = 0; i < kReasonCount; ++i) by_reason[i] += other.by_reason[i];
}

bool LedgerCounts::adds_up() const {
  const auto total = std::accumulate(by_reason.begin(), by_reason.end(), std::int64_t{0});
  return used + spare + dropped == read && total == read;
}

}  // namespace duskgrid::quotes
