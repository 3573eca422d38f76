#include "pricing/american_forwards.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <set>

namespace duskgrid::pricing {
namespace {

using market::ParityPair;
using quotes::PutCall;

// One step of the iteration: the forward that parity of the European equivalents gives, with the
// premiums at another.
class ForwardMap {
 public:
  ForwardMap(const DividendInverter& inverter, const ExerciseTerms& terms,
             std::span<const ExercisePair> near, const market::ForwardEstimate& start)
      : inverter_(inverter), terms_(terms), near_(near.begin(), near.end()), estimate_(start) {}

  // Nothing where no borrow gives the forward, or no pair has volatilities.
  std::optional<double> operator()(double forward) {
    ++rounds_;
    const auto borrow = market::borrow_of(forward, terms_.financing, terms_.dividends);
    if (!borrow) return std::nullopt;
    terms_.financing.borrow = *borrow;
    const auto [pairs, contradicting] = european_pairs(inverter_, terms_, near_);
    if (pairs.empty()) return std::nullopt;
    keep(pairs);
    contradicting_ += contradicting;
    market::place_forward(pairs, estimate_);
    estimate_.pairs += contradicting_;
    estimate_.breaks += contradicting_;
    return estimate_.forward > 0 ? std::optional(estimate_.forward) : std::nullopt;
  }
  const market::ForwardEstimate& estimate() const { return estimate_; }
  double borrow() const { return terms_.financing.borrow; }
  int rounds() const { return rounds_; }

 private:
  // A pair that has dropped out stays out: coming and going it would make the map jump.
  void keep(std::span<const ParityPair> pairs) {
    std::erase_if(near_, [&](const ExercisePair& p) {
      return std::none_of(pairs.begin(), pairs.end(),
                          [&](const ParityPair& k) { return k.strike == p.quoted.strike; });
    });
  }

  const DividendInverter& inverter_;
  ExerciseTerms terms_;
  std::vector<ExercisePair> near_;
  market::ForwardEstimate estimate_;
  int contradicting_ = 0;  // pairs dropped for it so far
  int rounds_ = 0;
};

// Under a negative rate a yield between it and zero (for calls; below it for puts) puts exercise
// between two boundaries, which is not inverted. The premium is continuous in the yield and the
// forward a hair off may fall there: the nearest yield outside stands in, whose premium is larger.
ExerciseTerms with_one_boundary(ExerciseTerms terms) {
  auto& f = terms.financing;
  if (f.rate < 0 && f.borrow < 0) f.borrow = f.borrow > f.rate ? 0.0 : f.rate;
  return terms;
}

// A side of a near pair whose mid has no volatility.
struct Doubtful {
  std::size_t pair;
  PutCall side;
  AmericanVolStatus status;
};

// Of those the pairs that no price within the spreads of both sides makes possible: next to what
// exercise pays a mid may lie on either side of it.
int count_impossible(const DividendInverter& inverter, const ExerciseTerms& terms,
                     std::span<const ExercisePair> near, std::span<const Doubtful> doubtful) {
  std::vector<double> strikes, prices;
  std::vector<PutCall> sides;
  std::vector<std::size_t> pairs;
  for (const Doubtful& d : doubtful) {
    const bool low = d.status == AmericanVolStatus::below_intrinsic;
    if (!low && d.status != AmericanVolStatus::above_bound) continue;
    const ExercisePair& p = near[d.pair];
    const double spread = 0.5 * (p.quoted.high - p.quoted.low);
    strikes.push_back(p.quoted.strike);
    sides.push_back(d.side);
    prices.push_back((d.side == PutCall::call ? p.call_mid : p.put_mid) + (low ? spread : -spread));
    pairs.push_back(d.pair);
  }
  if (pairs.empty()) return 0;
  std::vector<double> vols(prices.size()), europeans(prices.size());
  std::vector<AmericanVolStatus> statuses(prices.size());
  invert_american(inverter, terms, {strikes, sides, prices}, {vols, europeans, statuses});
  std::set<std::size_t> impossible;
  for (std::size_t i = 0; i < pairs.size(); ++i)
    if (statuses[i] == AmericanVolStatus::below_intrinsic ||
        statuses[i] == AmericanVolStatus::above_bound)
      impossible.insert(pairs[i]);
  return static_cast<int>(impossible.size());
}

}  // namespace

EuropeanPairs european_pairs(const DividendInverter& inverter, const ExerciseTerms& terms,
                             std::span<const ExercisePair> near) {
  std::vector<double> strikes, prices;
  std::vector<PutCall> sides;
  for (const ExercisePair& p : near)
    for (const PutCall side : {PutCall::call, PutCall::put}) {
      strikes.push_back(p.quoted.strike);
      sides.push_back(side);
      prices.push_back(side == PutCall::call ? p.call_mid : p.put_mid);
    }
  std::vector<double> vols(prices.size()), europeans(prices.size());
  std::vector<AmericanVolStatus> statuses(prices.size());
  invert_american(inverter, with_one_boundary(terms), {strikes, sides, prices},
                  {vols, europeans, statuses});
  EuropeanPairs out;
  std::vector<Doubtful> doubtful;
  for (std::size_t i = 0; i < near.size(); ++i) {
    const auto premium = [&](std::size_t at, bool american) -> std::optional<double> {
      if (!american) return 0.0;
      if (statuses[at] != AmericanVolStatus::ok) return std::nullopt;
      return prices[at] - europeans[at];
    };
    const auto call = premium(2 * i, near[i].call_american);
    const auto put = premium(2 * i + 1, near[i].put_american);
    if (!call) doubtful.push_back({i, PutCall::call, statuses[2 * i]});
    if (!put) doubtful.push_back({i, PutCall::put, statuses[2 * i + 1]});
    if (!call || !put) continue;
    ParityPair pair = near[i].quoted;
    pair.low -= *call - *put;
    pair.high -= *call - *put;
    out.pairs.push_back(pair);
  }
  out.contradicting = count_impossible(inverter, terms, near, doubtful);
  return out;
}

int count_breaks(const DividendInverter& inverter, const ExerciseTerms& terms,
                 std::span<const ExercisePair> near, const market::ForwardEstimate& estimate) {
  const auto [pairs, contradicting] = european_pairs(inverter, terms, near);
  return contradicting + market::count_breaks(pairs, estimate);
}

AmericanForward settle_forward(const DividendInverter& inverter, const ExerciseTerms& terms,
                               std::span<const ExercisePair> near,
                               market::ForwardEstimate& estimate) {
  constexpr int kMostRounds = 40, kSecantRounds = 8;
  ForwardMap map(inverter, terms, near, estimate);
  double at = estimate.forward;
  double low = 0, high = std::numeric_limits<double>::infinity();  // mapped up, mapped down
  std::optional<double> before, missed_before;
  while (map.rounds() < kMostRounds) {
    const auto mapped = map(at);
    if (!mapped) break;
    const double miss = *mapped - at;
    (miss > 0 ? low : high) = at;
    // Pairs that contradict one another make the map jump where another of them gives way: then
    // the jump itself is the answer.
    if (std::abs(miss) <= kForwardTolerance * at || high - low <= kForwardTolerance * at) {
      // The premiums are those at `at`, the forward is what parity makes of them.
      estimate = map.estimate();
      if (std::abs(miss) > kForwardTolerance * at) estimate.forward = at;
      return {true, map.rounds(), map.borrow()};
    }
    double next = *mapped;
    if (before && miss != *missed_before)
      next = at - miss * (at - *before) / (miss - *missed_before);
    const bool bracketed = low > 0 && std::isfinite(high);
    if (bracketed && (map.rounds() >= kSecantRounds || !(next > low && next < high)))
      next = 0.5 * (low + high);
    else if (!(std::abs(next - at) <= 10 * std::abs(miss)))
      next = *mapped;
    before = at;
    missed_before = miss;
    at = next;
  }
  return {false, map.rounds(), 0};
}

}  // namespace duskgrid::pricing
