#include "market/parity.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>

namespace duskgrid::market {
namespace {

constexpr double kNaN = std::numeric_limits<double>::quiet_NaN();
// A quoted interval is taken as uniform: standard deviation half-width / sqrt 3.
constexpr double kUniformDeviation = 0.57735026918962576;
// What is believed of a rate before any quote: nothing outside +-10 % or so.
constexpr double kPriorRateDeviation = 0.05;
constexpr double kLargestRate = 0.5;
constexpr double kHuber = 1.345;  // 95 % efficient on normal errors

double middle(const ParityPair& p) { return 0.5 * (p.low + p.high); }
// Locked or tiny spreads keep a finite weight.
double deviation(const ParityPair& p) {
  return std::max(0.5 * (p.high - p.low), 1e-9 * p.strike) * kUniformDeviation;
}

struct RateReading {
  double rate;
  double error;  // standard error, infinite when the pairs tell nothing
};

// The pair where call and put are closest says roughly where the forward is.
const ParityPair& nearest_pair(std::span<const ParityPair> pairs) {
  return *std::min_element(pairs.begin(), pairs.end(), [](const auto& a, const auto& b) {
    return std::abs(middle(a)) < std::abs(middle(b));
  });
}

double median_of(std::vector<double> values) {
  const auto middle_at = values.begin() + static_cast<std::ptrdiff_t>(values.size() / 2);
  std::nth_element(values.begin(), middle_at, values.end());
  return *middle_at;
}

// The pairs that lie along one line of middle on strike. The line to judge by has the median of the
// slopes between pairs half the chain apart, and the median level: a stray pair, however far out
// and however tight, turns neither.
std::vector<ParityPair> pairs_in_line(std::span<const ParityPair> pairs) {
  constexpr double kFarOut = 6;          // standard deviations, or ...
  constexpr double kNormalMad = 1.4826;  // ... of the median residual where that is larger
  const std::size_t half = pairs.size() / 2;
  std::vector<double> slopes, levels, misses;
  for (std::size_t i = 0; i + half < pairs.size(); ++i)
    slopes.push_back((middle(pairs[i + half]) - middle(pairs[i])) /
                     (pairs[i + half].strike - pairs[i].strike));
  const double slope = median_of(slopes);
  for (const ParityPair& p : pairs) levels.push_back(middle(p) - slope * p.strike);
  const double level = median_of(levels);
  for (const ParityPair& p : pairs)
    misses.push_back(std::abs(middle(p) - level - slope * p.strike) / deviation(p));
  const double limit = kFarOut * std::max(1.0, kNormalMad * median_of(misses));
  std::vector<ParityPair> kept;
  for (std::size_t i = 0; i < pairs.size(); ++i)
    if (misses[i] <= limit) kept.push_back(pairs[i]);
  return kept;
}

// Huber regression middle = a - D (K - centre) by reweighting; the rate of D and its error, which
// grows with the misfit where that is more than the spreads explain.
RateReading regress_rate(const ExpiryPairs& expiry) {
  constexpr std::size_t kFewestPairs = 3;
  constexpr int kRounds = 20;
  const RateReading nothing{0, std::numeric_limits<double>::infinity()};
  if (expiry.pairs.size() < kFewestPairs || expiry.american) return nothing;
  const auto pairs = pairs_in_line(expiry.pairs);
  if (pairs.size() < kFewestPairs) return nothing;
  const double centre = nearest_pair(pairs).strike;
  std::vector<double> robust(pairs.size(), 1.0);
  double slope = 1, error = 0;
  for (int round = 0; round < kRounds; ++round) {
    double s0 = 0, s1 = 0, s2 = 0, y0 = 0, y1 = 0;
    for (std::size_t i = 0; i < robust.size(); ++i) {
      const ParityPair& p = pairs[i];
      const double weight = robust[i] / (deviation(p) * deviation(p));
      const double x = p.strike - centre;
      s0 += weight;
      s1 += weight * x;
      s2 += weight * x * x;
      y0 += weight * middle(p);
      y1 += weight * x * middle(p);
    }
    const double determinant = s0 * s2 - s1 * s1;
    if (!(determinant > 1e-12 * s0 * s2)) return nothing;
    slope = (s0 * y1 - s1 * y0) / determinant;
    const double level = (y0 - slope * s1) / s0;
    double misfit = 0;
    for (std::size_t i = 0; i < robust.size(); ++i) {
      const ParityPair& p = pairs[i];
      const double r = std::abs(middle(p) - level - slope * (p.strike - centre)) / deviation(p);
      misfit += robust[i] * r * r;
      robust[i] = r > kHuber ? kHuber / r : 1.0;
    }
    const double scale = std::max(1.0, std::sqrt(misfit / static_cast<double>(robust.size())));
    error = scale * std::sqrt(s0 / determinant);
  }
  const double discount = -slope;
  if (!(discount > 0)) return nothing;
  const double rate = -std::log(discount) / expiry.year_fraction;
  if (std::abs(rate) > kLargestRate) return nothing;
  return {rate, error / (discount * expiry.year_fraction)};
}

double blend(const RateReading& own, double other, double other_error) {
  const double a = 1 / (own.error * own.error), b = 1 / (other_error * other_error);
  return std::isfinite(a) ? (a * own.rate + b * other) / (a + b) : own.rate;
}

// The rate common to all expiries, drawn to zero only as far as they tell nothing.
double common_rate(std::span<const RateReading> readings, double tolerance) {
  double weight = 1 / (kPriorRateDeviation * kPriorRateDeviation), sum = 0;
  for (const RateReading& r : readings) {
    const double w = 1 / (r.error * r.error + tolerance * tolerance);
    weight += w;
    sum += w * r.rate;
  }
  return sum / weight;
}

std::vector<double> zero_rates(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                               const ParityOptions& options) {
  std::vector<RateReading> readings;
  for (const ExpiryPairs& e : expiries) readings.push_back(regress_rate(e));
  const double common = common_rate(readings, options.rate_tolerance_common);
  std::vector<double> rates;
  for (std::size_t i = 0; i < readings.size(); ++i)
    rates.push_back(known.curve ? blend(readings[i], known.curve->rate(expiries[i].year_fraction),
                                        options.rate_tolerance_given)
                                : blend(readings[i], common, options.rate_tolerance_common));
  return rates;
}

// What one pair says of the forward once the discount is known.
struct ForwardInterval {
  double low, high, weight;
};

// Roughly where the forward is: the median of what the pairs say, each weighted by its tightness
// but none by more than three times the middling one, so that no stray pair decides.
double rough_forward(std::span<const ParityPair> pairs, double discount) {
  constexpr double kMostWeight = 3;
  std::vector<std::pair<double, double>> said;  // forward, weight
  std::vector<double> weights;
  for (const ParityPair& p : pairs) {
    weights.push_back(1 / deviation(p));
    said.emplace_back(p.strike + middle(p) / discount, weights.back());
  }
  const double most = kMostWeight * median_of(weights);
  double total = 0;
  for (auto& [forward, weight] : said) total += weight = std::min(weight, most);
  std::sort(said.begin(), said.end());
  double below = 0;
  for (const auto& [forward, weight] : said)
    if ((below += weight) >= 0.5 * total) return forward;
  return said.back().first;
}

std::vector<ForwardInterval> intervals_of(std::span<const ParityPair> near, double discount) {
  std::vector<ForwardInterval> out;
  for (const ParityPair& p : near) {
    const double d = deviation(p) / discount;
    out.push_back({p.strike + p.low / discount, p.strike + p.high / discount, 1 / (d * d)});
  }
  return out;
}

double distance_outside(const ForwardInterval& i, double forward) {
  return std::max({0.0, i.low - forward, forward - i.high});
}

// What some intervals have in common (low > high when nothing) and their weighted mean.
struct Meeting {
  double low, high, mean;
};

Meeting meet(std::span<const ForwardInterval> intervals) {
  double low = -std::numeric_limits<double>::infinity(), high = -low, weight = 0, sum = 0;
  for (const ForwardInterval& i : intervals) {
    low = std::max(low, i.low);
    high = std::min(high, i.high);
    weight += i.weight;
    sum += i.weight * 0.5 * (i.low + i.high);
  }
  return {low, high, sum / weight};
}

// Of contradicting intervals those that hold one point: as many as possible, then those that
// leave the others least weighted distance away. Such a point is an end of some interval.
std::vector<ForwardInterval> largest_agreement(std::span<const ForwardInterval> intervals) {
  std::vector<ForwardInterval> best;
  double least = std::numeric_limits<double>::infinity();
  for (const ForwardInterval& candidate : intervals)
    for (const double f : {candidate.low, candidate.high}) {
      std::vector<ForwardInterval> holding;
      double total = 0;
      for (const ForwardInterval& i : intervals) {
        const double distance = distance_outside(i, f);
        total += std::sqrt(i.weight) * distance;
        if (distance == 0) holding.push_back(i);
      }
      if (holding.size() < best.size() || (holding.size() == best.size() && total >= least))
        continue;
      least = total;
      best = std::move(holding);
    }
  return best;
}

// The yield on top of the dividends of the nearest expiry that has one, for expiries without pairs.
double nearest_borrow(const ForwardEstimates& estimates, std::span<const ExpiryPairs> expiries,
                      const KnownMarket& known, double t) {
  double borrow = 0, least = std::numeric_limits<double>::infinity();
  for (std::size_t i = 0; i < estimates.size(); ++i) {
    if (!estimates[i] || estimates[i]->source == ForwardSource::curve) continue;
    const double distance = std::abs(expiries[i].year_fraction - t);
    if (!(distance < least)) continue;
    const Financing financing{*known.spot, estimates[i]->zero_rate, 0, expiries[i].year_fraction};
    const auto own = borrow_of(estimates[i]->forward, financing, known.dividends);
    if (!own) continue;
    least = distance;
    borrow = *own;
  }
  return borrow;
}

}  // namespace

std::string_view word(ForwardSource source) {
  constexpr std::array<std::string_view, 4> kWords{"parity", "given", "curve", "carried"};
  return kWords[static_cast<std::size_t>(source)];
}

std::optional<std::string> ParityOptions::problem() const {
  const auto positive = [](const char* name, double v) -> std::optional<std::string> {
    if (v > 0 && std::isfinite(v)) return std::nullopt;
    return fmt::format("{} = {}, must be > 0", name, v);
  };
  if (auto p = positive("rate_tolerance_given", rate_tolerance_given)) return p;
  if (auto p = positive("rate_tolerance_common", rate_tolerance_common)) return p;
  if (auto p = positive("near_deviations", near_deviations)) return p;
  if (most_near_pairs < 1)
    return fmt::format("most_near_pairs = {}, must be >= 1", most_near_pairs);
  return std::nullopt;
}

std::vector<ParityPair> near_pairs(const ExpiryPairs& expiry, double discount_factor,
                                   const ParityOptions& options, std::optional<double> around) {
  const double rough = around ? *around : rough_forward(expiry.pairs, discount_factor);
  std::vector<ParityPair> sorted(expiry.pairs.begin(), expiry.pairs.end());
  std::sort(sorted.begin(), sorted.end(), [&](const auto& a, const auto& b) {
    return std::pair(std::abs(a.strike - rough), a.strike) <
           std::pair(std::abs(b.strike - rough), b.strike);
  });
  // At the money a straddle is D F s sqrt(2/pi): the middling one of the nearest three.
  std::vector<double> straddles;
  for (std::size_t i = 0; i < std::min<std::size_t>(3, sorted.size()); ++i)
    straddles.push_back(sorted[i].straddle);
  const double money = std::max(rough, sorted.front().strike);
  const double total_vol = median_of(straddles) / (0.8 * discount_factor * money);
  const double reach = std::max(options.near_deviations * total_vol * money,
                                std::abs(sorted.front().strike - rough));
  const auto most = static_cast<std::size_t>(options.most_near_pairs);
  std::size_t count = 1;
  while (count < std::min(most, sorted.size()) && std::abs(sorted[count].strike - rough) <= reach)
    ++count;
  sorted.resize(count);
  return sorted;
}

bool any_rate_readable(std::span<const ExpiryPairs> expiries) {
  return std::any_of(expiries.begin(), expiries.end(),
                     [](const ExpiryPairs& e) { return std::isfinite(regress_rate(e).error); });
}

void place_forward(std::span<const ParityPair> near, ForwardEstimate& estimate) {
  const auto intervals = intervals_of(near, estimate.discount_factor);
  Meeting common = meet(intervals);
  estimate.lowest_forward = common.low;
  estimate.highest_forward = common.high;
  if (!(common.low <= common.high)) common = meet(largest_agreement(intervals));
  // A hair inside the ends, so that rounding in D (F - K) cannot put it outside.
  const double hair = 1e-9 * (common.high - common.low);
  estimate.forward = std::clamp(common.mean, common.low + hair, common.high - hair);
  estimate.pairs = static_cast<int>(intervals.size());
  estimate.breaks = count_breaks(near, estimate);
}

int count_breaks(std::span<const ParityPair> near, const ForwardEstimate& estimate) {
  const auto intervals = intervals_of(near, estimate.discount_factor);
  const double tolerance = 1e-12 * std::abs(estimate.forward);
  return static_cast<int>(std::count_if(
      intervals.begin(), intervals.end(),
      [&](const ForwardInterval& i) { return distance_outside(i, estimate.forward) > tolerance; }));
}

ForwardEstimates parity_forwards(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                                 const ParityOptions& options) {
  ForwardEstimates estimates(expiries.size());
  const auto rates = zero_rates(expiries, known, options);
  for (std::size_t i = 0; i < expiries.size(); ++i) {
    const ExpiryPairs& e = expiries[i];
    const double t = e.year_fraction;
    ForwardEstimate out{.forward = kNaN,
                        .discount_factor = std::exp(-rates[i] * t),
                        .zero_rate = rates[i],
                        .carry = {},
                        .lowest_forward = kNaN,
                        .highest_forward = kNaN};
    if (!e.pairs.empty()) place_forward(near_pairs(e, out.discount_factor, options), out);
    if (e.given_forward) {
      out.forward = *e.given_forward;
      out.source = ForwardSource::given;
      out.pairs = out.breaks = 0;
    }
    if (!(std::isfinite(out.forward) && out.forward > 0)) continue;
    if (known.spot) out.carry = rates[i] - std::log(out.forward / *known.spot) / t;
    estimates[i] = out;
  }
  return estimates;
}

void fill_from_carry(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                     const ParityOptions& options, ForwardEstimates& estimates) {
  const bool complete = std::all_of(estimates.begin(), estimates.end(),
                                    [](const auto& estimate) { return estimate.has_value(); });
  if (!known.spot || complete) return;
  const auto rates = zero_rates(expiries, known, options);
  const ForwardEstimates found = estimates;
  for (std::size_t i = 0; i < expiries.size(); ++i) {
    if (found[i]) continue;
    const double t = expiries[i].year_fraction;
    const double borrow = known.carry ? *known.carry : nearest_borrow(found, expiries, known, t);
    const double forward = forward_of({*known.spot, rates[i], borrow, t}, known.dividends);
    if (!(forward > 0 && std::isfinite(forward))) continue;
    estimates[i] = ForwardEstimate{.forward = forward,
                                   .discount_factor = std::exp(-rates[i] * t),
                                   .zero_rate = rates[i],
                                   .carry = rates[i] - std::log(forward / *known.spot) / t,
                                   .source = ForwardSource::curve,
                                   .lowest_forward = kNaN,
                                   .highest_forward = kNaN};
  }
}

ForwardEstimates estimate_forwards(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                                   const ParityOptions& options) {
  auto estimates = parity_forwards(expiries, known, options);
  fill_from_carry(expiries, known, options, estimates);
  return estimates;
}

}  // namespace duskgrid::market
