#include "night/slice_market.h"

#include <algorithm>
#include <cmath>

#include "market/day_count.h"
#include "pricing/american_forwards.h"

namespace duskgrid::night {
namespace {

using market::ForwardEstimate;
using market::ForwardSource;
using publish::ExerciseTaken;
using publish::Origin;
using quotes::Exercise;
using quotes::Quote;
using quotes::Reason;

class MarketFinder {
 public:
  MarketFinder(const quotes::QuoteTable& table, const quotes::Chain& chain,
               const NightConfig& config, const ResolvedNight& night)
      : table_(table), chain_(chain), config_(config), night_(night) {
    const auto& name = table.underlyings[chain.underlying];
    if (const auto found = config.underlyings.find(name); found != config.underlyings.end())
      facts_ = found->second;
    // A stated carry is the whole yield, dividends included.
    const auto found = night.dividends.find(name);
    if (found != night.dividends.end() && !facts_.carry)
      dividends_ = market::dividends_after(night.as_of.instant, found->second);
  }

  ChainMarket run() {
    open_slices();
    find_spot();
    find_forwards();
    for (auto& slice : out_.slices) {
      if (slice.forward && slice.american) set_exercise(slice);
      account(slice);
    }
    return std::move(out_);
  }

 private:
  const Quote& quote(std::uint32_t row) const { return table_.quotes[row]; }

  void open_slices() {
    for (const auto& slice : chain_.slices) {
      const Reason first = quote(slice.rows.front()).reason;
      if (first == Reason::expired || first == Reason::too_short) continue;
      const bool american = std::any_of(slice.rows.begin(), slice.rows.end(), [&](auto row) {
        return quote(row).exercise == Exercise::american;
      });
      out_.slices.push_back(
          {&slice, market::year_fraction(night_.as_of.instant, slice.expiry), american});
    }
  }

  // Rows of another day, or of another contract, tell of another spot.
  static bool tells_spot(const Quote& q) {
    return q.underlying_price > 0 && q.reason != Reason::expired && q.reason != Reason::stale &&
           q.reason != Reason::non_standard;
  }

  // As stated, else the middle of what the rows say, else the night's.
  void find_spot() {
    out_.spot = facts_.spot;
    out_.spot_origin = Origin::given;
    if (out_.spot) return;
    std::vector<double> prices;
    for (const auto& slice : chain_.slices)
      for (const auto row : slice.rows)
        if (tells_spot(quote(row))) prices.push_back(quote(row).underlying_price);
    if (prices.empty()) {
      out_.spot = config_.spot;
      if (!out_.spot) out_.spot_origin = Origin::none;
      return;
    }
    const auto middle = prices.begin() + static_cast<std::ptrdiff_t>(prices.size() / 2);
    std::nth_element(prices.begin(), middle, prices.end());
    out_.spot = *middle;
    out_.spot_origin = Origin::rows;
  }

  // Sound two-sided call and put of one strike, rows being by strike and call before put.
  std::vector<pricing::ExercisePair> pairs_of(const quotes::ChainSlice& slice) const {
    const auto sound = [](const Quote& q) {
      return q.reason == Reason::none && q.quoted_in == quotes::QuotedIn::price;
    };
    // Rows that are not sound may stand between: pairs are made of those that are.
    std::vector<const Quote*> rows;
    for (const auto row : slice.rows)
      if (sound(quote(row))) rows.push_back(&quote(row));
    std::vector<pricing::ExercisePair> pairs;
    for (std::size_t i = 0; i + 1 < rows.size(); ++i) {
      const Quote &call = *rows[i], &put = *rows[i + 1];
      if (call.strike != put.strike || call.put_call == put.put_call) continue;
      const double call_mid = quotes::mid(call), put_mid = quotes::mid(put);
      pairs.push_back({{call.strike, call.bid - put.ask, call.ask - put.bid, call_mid + put_mid},
                       call_mid,
                       put_mid,
                       call.exercise == Exercise::american,
                       put.exercise == Exercise::american});
    }
    return pairs;
  }

  void find_forwards() {
    std::vector<market::ExpiryPairs> pairs;
    std::vector<std::vector<pricing::ExercisePair>> exercise_pairs;
    for (const auto& s : out_.slices) {
      exercise_pairs.push_back(pairs_of(*s.rows));
      pairs.push_back(
          {s.year_fraction, {}, given_forward(facts_, night_, s.rows->expiry), s.american});
      for (const auto& pair : exercise_pairs.back()) pairs.back().pairs.push_back(pair.quoted);
    }
    market::KnownMarket known{out_.spot, facts_.borrow ? facts_.borrow : facts_.carry, night_.curve,
                              dividends_};
    rates_read_ = !night_.curve && market::any_rate_readable(pairs);
    auto found = market::parity_forwards(pairs, known, config_.parity);
    if (!out_.spot) infer_spot(pairs, exercise_pairs, found);
    known.spot = out_.spot;
    for (std::size_t i = 0; i < found.size(); ++i)
      if (out_.slices[i].american && out_.spot && found[i])
        settle(out_.slices[i], pairs[i], exercise_pairs[i], found[i]);
    market::fill_from_carry(pairs, known, config_.parity, found);
    for (std::size_t i = 0; i < found.size(); ++i) {
      if (found[i] && out_.spot)
        found[i]->carry = found[i]->zero_rate -
                          std::log(found[i]->forward / *out_.spot) / out_.slices[i].year_fraction;
      out_.slices[i].forward = found[i];
    }
  }

  double stated_yield() const {
    return facts_.borrow ? *facts_.borrow : facts_.carry.value_or(0.0);
  }

  // The spot that has a forward at the stated yield; the forward is linear in it.
  std::optional<double> spot_of(const ForwardEstimate& estimate, double t) const {
    const auto forward = [&](double spot) {
      return market::forward_of({spot, estimate.zero_rate, stated_yield(), t}, dividends_);
    };
    const double slope = forward(2) - forward(1);
    const double spot = (estimate.forward - (forward(1) - slope)) / slope;
    return spot > 0 && std::isfinite(spot) ? std::optional(spot) : std::nullopt;
  }

  // Exercise compares with the spot: where nobody says it, the first forward does, a European one
  // where there is one. Of an American expiry the forward and the spot are found in turn.
  void infer_spot(const std::vector<market::ExpiryPairs>& pairs,
                  const std::vector<std::vector<pricing::ExercisePair>>& exercise_pairs,
                  const market::ForwardEstimates& found) {
    const bool any_american = std::any_of(out_.slices.begin(), out_.slices.end(),
                                          [](const OpenSlice& s) { return s.american; });
    if (!any_american) return;
    for (const bool american : {false, true})
      for (std::size_t i = 0; i < found.size() && !out_.spot; ++i) {
        if (!found[i] || out_.slices[i].american != american) continue;
        const double t = out_.slices[i].year_fraction;
        out_.spot = spot_of(*found[i], t);
        if (!out_.spot) continue;
        out_.spot_origin = Origin::inferred;
        constexpr int kTurns = 5;
        for (int turn = 0; american && turn < kTurns; ++turn) {
          auto estimate = found[i];
          OpenSlice slice = out_.slices[i];
          settle_by_parity(slice, pairs[i], exercise_pairs[i], *estimate);
          const auto spot = slice.settled ? spot_of(*estimate, t) : std::nullopt;
          if (!spot) break;
          out_.spot = spot;
        }
      }
  }

  pricing::ExerciseTerms terms_of(const OpenSlice& s, double rate, double borrow) const {
    return {{*out_.spot, rate, borrow, s.year_fraction}, dividends_};
  }

  static std::vector<pricing::ExercisePair> near_of(const market::ExpiryPairs& pairs,
                                                    const std::vector<pricing::ExercisePair>& all,
                                                    const ForwardEstimate& estimate,
                                                    const market::ParityOptions& options) {
    std::vector<pricing::ExercisePair> near;
    for (const auto& chosen :
         market::near_pairs(pairs, estimate.discount_factor, options, estimate.forward))
      near.push_back(*std::find_if(all.begin(), all.end(), [&](const auto& pair) {
        return pair.quoted.strike == chosen.strike;
      }));
    return near;
  }

  // From parity of the quoted prices to that of their European equivalents. Before an ex-date pairs
  // between the spot and the spot without the dividend say nothing of the forward, and quoted
  // parity starts among them: the dividends do better.
  void settle_by_parity(OpenSlice& slice, const market::ExpiryPairs& pairs,
                        const std::vector<pricing::ExercisePair>& exercise_pairs,
                        ForwardEstimate& estimate) const {
    const auto terms = terms_of(slice, estimate.zero_rate, borrow_before_);
    if (market::count_before(dividends_, slice.year_fraction) > 0) {
      const double financed = market::forward_of(terms.financing, dividends_);
      if (financed > 0) estimate.forward = financed;
    }
    // The pairs near the money are those near the forward that is found.
    const auto near = near_of(pairs, exercise_pairs, estimate, config_.parity);
    slice.settled = pricing::settle_forward(night_.american, terms, near, estimate).settled;
    if (!slice.settled) return;
    const auto nearer = near_of(pairs, exercise_pairs, estimate, config_.parity);
    if (!same_strikes(near, nearer))
      slice.settled = pricing::settle_forward(night_.american, terms, nearer, estimate).settled;
  }

  // In any order.
  static bool same_strikes(std::vector<pricing::ExercisePair> a,
                           std::vector<pricing::ExercisePair> b) {
    const auto by_strike = [](const auto& x, const auto& y) {
      return x.quoted.strike < y.quoted.strike;
    };
    std::sort(a.begin(), a.end(), by_strike);
    std::sort(b.begin(), b.end(), by_strike);
    return std::equal(a.begin(), a.end(), b.begin(), b.end(), [](const auto& x, const auto& y) {
      return x.quoted.strike == y.quoted.strike;
    });
  }

  void settle(OpenSlice& slice, const market::ExpiryPairs& pairs,
              const std::vector<pricing::ExercisePair>& exercise_pairs,
              std::optional<ForwardEstimate>& estimate) {
    if (pairs.pairs.empty()) return;
    const bool given = estimate->source == ForwardSource::given;
    if (!given && !facts_.borrow) {
      settle_by_parity(slice, pairs, exercise_pairs, *estimate);
      const auto terms = terms_of(slice, estimate->zero_rate, 0);
      if (slice.settled) {
        const auto own = market::borrow_of(estimate->forward, terms.financing, dividends_);
        borrow_before_ = own.value_or(borrow_before_);
        return;
      }
    }
    auto terms = terms_of(slice, estimate->zero_rate, facts_.borrow.value_or(borrow_before_));
    if (given) {
      const auto own = market::borrow_of(estimate->forward, terms.financing, dividends_);
      if (!own) return;
      terms.financing.borrow = *own;
    } else {
      estimate->forward = market::forward_of(terms.financing, dividends_);
      estimate->source = ForwardSource::curve;
    }
    if (!(estimate->forward > 0)) {
      estimate.reset();
      return;
    }
    estimate->pairs = 0;
    estimate->breaks =
        pricing::count_breaks(night_.american, terms,
                              near_of(pairs, exercise_pairs, *estimate, config_.parity), *estimate);
  }

  void set_exercise(OpenSlice& slice) const {
    if (!out_.spot) return;
    const auto terms = terms_of(slice, slice.forward->zero_rate, 0);
    const auto borrow = market::borrow_of(slice.forward->forward, terms.financing, dividends_);
    if (borrow) slice.exercise = terms_of(slice, slice.forward->zero_rate, *borrow);
  }

  Origin borrow_origin(const ForwardEstimate& estimate) const {
    if (estimate.source == ForwardSource::parity) return Origin::inferred;
    if (estimate.source == ForwardSource::given) return Origin::given;
    return facts_.borrow || facts_.carry ? Origin::given : Origin::near;
  }

  void account(OpenSlice& slice) const {
    auto& row = slice.financing;
    row.expiry = slice.rows->expiry;
    row.exercise = !slice.american  ? ExerciseTaken::european
                   : slice.exercise ? ExerciseTaken::american
                                    : ExerciseTaken::american_as_european;
    row.dividends = market::count_before(dividends_, slice.year_fraction);
    if (out_.spot) row.spot = *out_.spot;
    row.spot_origin = out_.spot_origin;
    if (!slice.forward) return;
    row.zero_rate = slice.forward->zero_rate;
    row.rate_origin = night_.curve  ? Origin::given
                      : rates_read_ ? Origin::inferred
                                    : Origin::assumed;
    if (!out_.spot) return;
    market::Financing financing{*out_.spot, row.zero_rate, 0, slice.year_fraction};
    const auto borrow = market::borrow_of(slice.forward->forward, financing, dividends_);
    if (!borrow) return;
    financing.borrow = row.borrow = *borrow;
    row.borrow_origin = borrow_origin(*slice.forward);
    row.dividend_effect = slice.forward->forward - market::forward_of(financing, {});
    if (row.dividends == 0) row.dividend_effect = 0;
  }

  const quotes::QuoteTable& table_;
  const quotes::Chain& chain_;
  const NightConfig& config_;
  const ResolvedNight& night_;
  UnderlyingFacts facts_;
  std::vector<market::Dividend> dividends_;
  bool rates_read_ = false;   // some European expiry has pairs to read a rate from
  double borrow_before_ = 0;  // of the last expiry whose forward settled
  ChainMarket out_;
};

}  // namespace

ChainMarket find_market(const quotes::QuoteTable& table, const quotes::Chain& chain,
                        const NightConfig& config, const ResolvedNight& night) {
  return MarketFinder(table, chain, config, night).run();
}

std::optional<double> given_forward(const UnderlyingFacts& facts, const ResolvedNight& night,
                                    quotes::Instant expiry) {
  const auto& clock = night.as_of.clock;
  const auto date = quotes::format_date(clock, expiry);
  std::optional<double> of_date;
  for (const auto& [key, forward] : facts.forwards) {
    const auto cell = quotes::parse_date_cell(key);
    if (!cell) continue;
    const auto instant = quotes::resolve(*cell, clock, night.times.default_time);
    if (instant == expiry) return forward;
    const bool dated = cell->date && !cell->time_of_day;
    if (dated && quotes::format_date(clock, instant) == date) of_date = forward;
  }
  return of_date;
}

}  // namespace duskgrid::night
