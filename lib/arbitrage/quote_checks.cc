#include "arbitrage/quote_checks.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "pricing/invert.h"

namespace duskgrid::arbitrage {
namespace {

using quotes::PutCall;

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();

// One side of the ladder, with only what vertical, butterfly and calendar need.
struct Rung {
  double strike, bid, ask;
};

std::vector<Rung> ladder(const QuotedSlice& slice, PutCall side) {
  std::vector<Rung> out;
  for (const QuotedStrike& s : slice.strikes) {
    const Rung rung = side == PutCall::call ? Rung{s.strike, s.call_bid, s.call_ask}
                                            : Rung{s.strike, s.put_bid, s.put_ask};
    if (std::isfinite(rung.bid) || std::isfinite(rung.ask)) out.push_back(rung);
  }
  return out;
}

LegType leg_type(PutCall side) { return side == PutCall::call ? LegType::call : LegType::put; }

Leg buy(double quantity, const Rung& r, PutCall side, const QuotedSlice& s) {
  return {quantity, leg_type(side),        r.strike,       s.expiry,
          r.ask,    0.5 * (r.ask - r.bid), s.year_fraction};
}

Leg sell(double quantity, const Rung& r, PutCall side, const QuotedSlice& s) {
  return {-quantity, leg_type(side),        r.strike,       s.expiry,
          r.bid,     0.5 * (r.ask - r.bid), s.year_fraction};
}

// At the slice's own forward: nothing is paid now.
Leg agree(double quantity, const QuotedSlice& s) {
  return {quantity, LegType::forward, s.forward, s.expiry, 0, kNaN, s.year_fraction};
}

// 0.01 of vol that the amount is worth on the first leg sold.
double vol_points(const Violation& v, const QuotedSlice& slice) {
  for (const Leg& leg : v.legs) {
    if (leg.quantity > 0 || leg.type == LegType::forward || leg.expiry != slice.expiry) continue;
    const pricing::BlackTerms terms{leg.type == LegType::call ? PutCall::call : PutCall::put,
                                    slice.forward, leg.strike, slice.discount_factor};
    const auto vol = pricing::implied_vol(terms, leg.price, slice.year_fraction);
    if (vol.status != pricing::VolStatus::ok) return kNaN;
    const double vega = pricing::black_greeks(terms, vol.vol, slice.year_fraction).vega;
    const double points = 100 * v.amount / (vega * -leg.quantity);
    return std::isfinite(points) ? points : kNaN;
  }
  return kNaN;
}

class Finder {
 public:
  explicit Finder(double tolerance) : tolerance_(tolerance) {}

  std::vector<Violation> take() { return std::move(found_); }

  void check_slice(const QuotedSlice& slice) {
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      const auto rungs = ladder(slice, side);
      check_verticals(slice, side, rungs);
      check_butterflies(slice, side, rungs);
    }
    if (slice.american) return;
    check_bounds(slice);
    check_parity(slice);
    check_boxes(slice);
  }

  // Neighbouring expiries first. A wider pair is news only where no narrower one has sold the same
  // early quote or bought the same late one.
  void check_calendars(std::span<const QuotedSlice> slices, PutCall side) {
    std::vector<TimedLadder> ladders;
    for (const QuotedSlice& s : slices) ladders.emplace_back(s, side);
    for (std::size_t gap = 1; gap < ladders.size(); ++gap)
      for (std::size_t early = 0; early + gap < ladders.size(); ++early)
        check_calendar_pair(ladders[early], ladders[early + gap], side, gap);
  }

 private:
  bool record(const QuotedSlice& slice, Kind kind, double amount, std::vector<double> strikes,
              std::vector<Leg> legs, quotes::Instant expiry_2 = quotes::kNoInstant) {
    if (!(amount > tolerance_ * slice.forward)) return false;
    Violation v{.scope = Scope::quotes,
                .kind = kind,
                .expiry = slice.expiry,
                .expiry_2 = expiry_2,
                .strikes = std::move(strikes),
                .amount = amount,
                .vol_points = kNaN,
                .half_spreads = kNaN,
                .legs = std::move(legs)};
    double spreads = 0;
    for (const Leg& leg : v.legs)
      if (leg.type != LegType::forward) spreads += std::abs(leg.quantity) * leg.half_spread;
    if (spreads > 0) v.half_spreads = amount / spreads;
    v.vol_points = vol_points(v, slice);
    found_.push_back(std::move(v));
    return true;
  }

  // Of a call, the dearer strike is the lower one: selling the higher above the lower is free
  // money, and so is selling the lower for more than D dK above the higher. Of a put, mirrored.
  void check_verticals(const QuotedSlice& slice, PutCall side, const std::vector<Rung>& rungs) {
    const double width_value = slice.american ? 1.0 : slice.discount_factor;
    const bool call = side == PutCall::call;
    check_pairs(slice, side, rungs, /*buy_lower=*/call, 0);
    check_pairs(slice, side, rungs, /*buy_lower=*/!call, width_value);
  }

  // Locked in by buying one of strikes i < j and selling the other.
  static double pair_amount(const Rung& lower, const Rung& upper, bool buy_lower,
                            double width_value) {
    const double credit = buy_lower ? upper.bid - lower.ask : lower.bid - upper.ask;
    return credit - width_value * (upper.strike - lower.strike);
  }

  bool record_pair(const QuotedSlice& slice, PutCall side, const Rung& lower, const Rung& upper,
                   bool buy_lower, double width_value) {
    const Rung& bought = buy_lower ? lower : upper;
    const Rung& sold = buy_lower ? upper : lower;
    return record(slice, Kind::vertical, pair_amount(lower, upper, buy_lower, width_value),
                  {lower.strike, upper.strike},
                  {buy(1, bought, side, slice), sell(1, sold, side, slice)});
  }

  void check_pairs(const QuotedSlice& slice, PutCall side, const std::vector<Rung>& rungs,
                   bool buy_lower, double width_value) {
    // What a strike brings to any pair with a higher one.
    const auto lead = [&](std::size_t i) {
      const double width = width_value * rungs[i].strike;
      return buy_lower ? width - rungs[i].ask : rungs[i].bid + width;
    };
    // The best below the neighbour since the last break: a wider pair within that stretch is news.
    const std::size_t none = rungs.size();
    std::size_t best = none;
    for (std::size_t j = 1; j < rungs.size(); ++j) {
      const bool broken =
          record_pair(slice, side, rungs[j - 1], rungs[j], buy_lower, width_value) ||
          (best != none && record_pair(slice, side, rungs[best], rungs[j], buy_lower, width_value));
      if (broken)
        best = none;
      else if (std::isfinite(lead(j - 1)) && (best == none || lead(best) < lead(j - 1)))
        best = j - 1;
    }
  }

  bool record_butterfly(const QuotedSlice& slice, PutCall side, const Rung& a, const Rung& b,
                        const Rung& c) {
    const double weight = (c.strike - b.strike) / (c.strike - a.strike);
    const double amount = b.bid - weight * a.ask - (1 - weight) * c.ask;
    return record(
        slice, Kind::butterfly, amount, {a.strike, b.strike, c.strike},
        {buy(weight, a, side, slice), sell(1, b, side, slice), buy(1 - weight, c, side, slice)});
  }

  void check_butterflies(const QuotedSlice& slice, PutCall side, const std::vector<Rung>& rungs) {
    std::vector<std::size_t> broken;
    for (std::size_t j = 1; j + 1 < rungs.size(); ++j)
      if (record_butterfly(slice, side, rungs[j - 1], rungs[j], rungs[j + 1])) broken.push_back(j);
    // The least cost of replicating a strike from others is the lower convex hull of the asks.
    const auto hull = lower_hull(rungs);
    for (std::size_t h = 0; h + 1 < hull.size(); ++h) {
      const std::size_t a = hull[h], c = hull[h + 1];
      if (std::any_of(broken.begin(), broken.end(), [&](auto j) { return a <= j && j <= c; }))
        continue;
      for (std::size_t j = a + 1; j < c; ++j) {
        const bool adjacent = j == a + 1 && c == j + 1;
        if (!adjacent) record_butterfly(slice, side, rungs[a], rungs[j], rungs[c]);
      }
    }
  }

  static std::vector<std::size_t> lower_hull(const std::vector<Rung>& rungs) {
    std::vector<std::size_t> hull;
    const auto above_line = [&](std::size_t a, std::size_t b, std::size_t c) {
      return (rungs[b].ask - rungs[a].ask) * (rungs[c].strike - rungs[a].strike) >=
             (rungs[c].ask - rungs[a].ask) * (rungs[b].strike - rungs[a].strike);
    };
    for (std::size_t i = 0; i < rungs.size(); ++i) {
      if (!std::isfinite(rungs[i].ask)) continue;
      while (hull.size() >= 2 && above_line(hull[hull.size() - 2], hull.back(), i)) hull.pop_back();
      hull.push_back(i);
    }
    return hull;
  }

  void check_bounds(const QuotedSlice& s) {
    for (const QuotedStrike& q : s.strikes) {
      const double value = s.discount_factor * (s.forward - q.strike);
      const Rung call{q.strike, q.call_bid, q.call_ask}, put{q.strike, q.put_bid, q.put_ask};
      const Leg long_forward = agree(1, s);
      const Leg short_forward = agree(-1, s);
      record(s, Kind::bounds, value - q.call_ask, {q.strike},
             {buy(1, call, PutCall::call, s), short_forward});
      record(s, Kind::bounds, -value - q.put_ask, {q.strike},
             {buy(1, put, PutCall::put, s), long_forward});
      record(s, Kind::bounds, q.call_bid - s.discount_factor * s.forward, {q.strike},
             {sell(1, call, PutCall::call, s), long_forward});
      record(s, Kind::bounds, q.put_bid - s.discount_factor * q.strike, {q.strike},
             {sell(1, put, PutCall::put, s)});
    }
  }

  void check_parity(const QuotedSlice& s) {
    for (const QuotedStrike& q : s.strikes) {
      const double value = s.discount_factor * (s.forward - q.strike);
      const Rung call{q.strike, q.call_bid, q.call_ask}, put{q.strike, q.put_bid, q.put_ask};
      record(s, Kind::parity, value - (q.call_ask - q.put_bid), {q.strike},
             {buy(1, call, PutCall::call, s), sell(1, put, PutCall::put, s), agree(-1, s)});
      record(s, Kind::parity, (q.call_bid - q.put_ask) - value, {q.strike},
             {sell(1, call, PutCall::call, s), buy(1, put, PutCall::put, s), agree(1, s)});
    }
  }

  // A box of strikes a < b is worth D (b - a) whatever happens.
  void check_boxes(const QuotedSlice& s) {
    const QuotedStrike* previous = nullptr;
    for (const QuotedStrike& q : s.strikes) {
      const bool paired = std::isfinite(q.call_bid + q.call_ask + q.put_bid + q.put_ask);
      if (!paired) continue;
      if (previous) check_box(s, *previous, q);
      previous = &q;
    }
  }

  void check_box(const QuotedSlice& s, const QuotedStrike& a, const QuotedStrike& b) {
    const double value = s.discount_factor * (b.strike - a.strike);
    const Rung ca{a.strike, a.call_bid, a.call_ask}, pa{a.strike, a.put_bid, a.put_ask};
    const Rung cb{b.strike, b.call_bid, b.call_ask}, pb{b.strike, b.put_bid, b.put_ask};
    const double cost = a.call_ask - b.call_bid + b.put_ask - a.put_bid;
    const double proceeds = a.call_bid - b.call_ask + b.put_bid - a.put_ask;
    record(s, Kind::box, value - cost, {a.strike, b.strike},
           {buy(1, ca, PutCall::call, s), sell(1, cb, PutCall::call, s),
            buy(1, pb, PutCall::put, s), sell(1, pa, PutCall::put, s)});
    record(s, Kind::box, proceeds - value, {a.strike, b.strike},
           {sell(1, ca, PutCall::call, s), buy(1, cb, PutCall::call, s),
            sell(1, pb, PutCall::put, s), buy(1, pa, PutCall::put, s)});
  }

  // One side of a slice, and the narrowest gap in expiries at which each quote was part of a
  // calendar break, 0 for never.
  struct TimedLadder {
    TimedLadder(const QuotedSlice& of, PutCall side)
        : slice(&of), rungs(ladder(of, side)), sold(rungs.size(), 0), bought(rungs.size(), 0) {}
    const QuotedSlice* slice;
    std::vector<Rung> rungs;
    std::vector<std::size_t> sold, bought;
  };

  void check_calendar_pair(TimedLadder& early, TimedLadder& late, PutCall side, std::size_t gap) {
    if (early.slice->american != late.slice->american) return;
    for (std::size_t i = 0; i < early.rungs.size(); ++i)
      if (early.sold[i] == 0 && std::isfinite(early.rungs[i].bid))
        check_calendar_at(early, i, late, side, gap);
  }

  void check_calendar_at(TimedLadder& early, std::size_t i, TimedLadder& late, PutCall side,
                         std::size_t gap) {
    const QuotedSlice &first = *early.slice, &second = *late.slice;
    const Rung& rung = early.rungs[i];
    // At equal K/F a later option is worth more in units of its own D F; an American one at equal
    // K.
    const bool american = first.american;
    const double quantity = american ? 1.0
                                     : first.discount_factor * first.forward /
                                           (second.discount_factor * second.forward);
    const double strike = american ? rung.strike : rung.strike * second.forward / first.forward;
    const auto next = std::lower_bound(late.rungs.begin(), late.rungs.end(), strike * (1 - 1e-12),
                                       [](const Rung& r, double k) { return r.strike < k; });
    if (next == late.rungs.end()) return;
    const auto upper = static_cast<std::size_t>(next - late.rungs.begin());
    const bool same = std::abs(next->strike - strike) <= 1e-12 * strike;
    if (!same && upper == 0) return;
    const std::size_t lower = same ? upper : upper - 1;
    const auto told = [&](std::size_t j) { return late.bought[j] > 0 && late.bought[j] < gap; };
    if (told(lower) || told(upper)) return;

    const Rung &a = late.rungs[lower], &b = late.rungs[upper];
    std::vector<double> strikes{rung.strike, a.strike};
    std::vector<Leg> legs{sell(1, rung, side, first)};
    double cost = quantity * a.ask;
    if (same) {
      legs.push_back(buy(quantity, a, side, second));
    } else {
      const double weight = (b.strike - strike) / (b.strike - a.strike);
      cost = quantity * (weight * a.ask + (1 - weight) * b.ask);
      strikes.push_back(b.strike);
      legs.push_back(buy(quantity * weight, a, side, second));
      legs.push_back(buy(quantity * (1 - weight), b, side, second));
    }
    if (!record(first, Kind::calendar, rung.bid - cost, std::move(strikes), std::move(legs),
                second.expiry))
      return;
    early.sold[i] = late.bought[lower] = late.bought[upper] = gap;
  }

  double tolerance_;
  std::vector<Violation> found_;
};

}  // namespace

std::vector<Violation> check_quotes(std::span<const QuotedSlice> slices, double tolerance) {
  Finder finder(tolerance);
  for (const QuotedSlice& slice : slices) finder.check_slice(slice);
  for (const PutCall side : {PutCall::call, PutCall::put}) finder.check_calendars(slices, side);
  return finder.take();
}

}  // namespace duskgrid::arbitrage
