#include "pricing/american_batch.h"

#include <algorithm>
#include <array>
#include <boost/math/tools/roots.hpp>
#include <cmath>
#include <cstdint>
#include <deque>
#include <limits>
#include <vector>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

// The intervals of total volatility that are tabled: kFirst kRatio^j. Wider ones cost fewer tables
// and lose digits: at 3 the premium is good to 1e-7 of the strike where rates are ordinary.
constexpr double kFirst = 1e-3, kRatio = 3;
constexpr int kIntervals = 9;  // to 19.7
// Tables reach a little beyond, so that a search that ends at a border does not need two.
constexpr double kOverlap = 1.06;
// A price this near intrinsic, in units of strike or spot, is intrinsic: what rounding leaves.
constexpr double kSame = 1e-12;

// A quote as a put of unit strike.
struct UnitQuote {
  double log_spot, price;
  double log_forward, scale, intrinsic;  // European: scale b(-|log_forward|, s) + intrinsic
  double size;                           // of the strike in quote currency
  double per_spot;                       // the same in units of the spot
};

// A side of one expiry: its put in units of time, and the tables made so far.
class Side {
 public:
  Side(const PanelMaker& maker, double rate, double yield)
      : maker_(maker), rate_(rate), yield_(yield), discount_(std::exp(-rate)) {}

  UnitQuote quote(double spot, double strike, double price) const {
    UnitQuote q{};
    q.log_spot = log_moneyness_of_forward(spot, strike);
    q.price = price / strike;
    q.log_forward = q.log_spot + rate_ - yield_;
    q.scale = discount_ * std::exp(0.5 * q.log_forward);
    q.intrinsic = discount_ * std::max(0.0, -std::expm1(q.log_forward));
    q.size = strike;
    return q;
  }

  double european(const UnitQuote& q, double s) const {
    return q.intrinsic + q.scale * normalised_price(-std::abs(q.log_forward), s);
  }

  // The table for a total volatility, `last` if that will do; null where there is none.
  const PremiumPanel* panel(double s, const PremiumPanel* last) {
    if (last && s >= last->low && s <= last->high) return last;
    // The finer ones were made later.
    for (auto made = panels_.rbegin(); made != panels_.rend(); ++made)
      if (s >= made->panel.low && s <= made->panel.high) return usable(made->panel);
    const double at = std::floor(std::log(s / kFirst) / std::log(kRatio));
    if (!(at >= 0 && at < kIntervals)) return nullptr;
    const double low = kFirst * std::pow(kRatio, at);
    return add(low, low * kRatio, 0);
  }

  // A table of the half (in the logarithm) of another's interval that has s in it; null past the
  // finest. What needs it is a transition in the volatility: for q > r the strike lies
  // |ln(r/q)| / s deviations above the boundary, and begins to matter suddenly.
  const PremiumPanel* finer(const PremiumPanel& panel, double s) {
    constexpr int kFinest = 3;
    const auto from = std::find_if(panels_.begin(), panels_.end(),
                                   [&](const Made& made) { return &made.panel == &panel; });
    if (from->depth == kFinest) return nullptr;
    const double middle = std::sqrt(from->low * from->high);
    const double low = s < middle ? from->low : middle, high = s < middle ? middle : from->high;
    for (const Made& made : panels_)
      if (made.low == low && made.high == high) return usable(made.panel);
    return add(low, high, from->depth + 1);
  }

  std::size_t made() const { return panels_.size(); }

 private:
  struct Made {
    double low, high;  // the panel reaches a little beyond
    int depth;
    PremiumPanel panel;
  };

  static const PremiumPanel* usable(const PremiumPanel& panel) {
    return panel.converged ? &panel : nullptr;
  }

  const PremiumPanel* add(double low, double high, int depth) {
    const double overlap = std::pow(kOverlap, std::pow(0.5, depth));
    panels_.push_back(
        {low, high, depth, maker_.make(rate_, yield_, low / overlap, high * overlap)});
    return usable(panels_.back().panel);
  }

  const PanelMaker& maker_;
  double rate_, yield_, discount_;
  std::deque<Made> panels_;
};

enum class Reached { nothing, rough, good };

struct Found {
  Reached reached;  // rough: the table is not good enough here, but a start for something better
  double total_vol, european;
  double slope;  // of the price by total volatility
};

// What a table's boundary of few nodes and its quadrature cost, a share of the premium; and the
// share of the promise that estimates may use, since they are no bounds. With both the worst of
// 22,000 random quotes was a third of the promise.
constexpr double kDiscretisation = 5e-6, kMargin = 0.5;

// Newton's method on the price, which grows with volatility, kept between bounds. `most` has a
// price at or above the one asked.
Found search(Side& side, const UnitQuote& q, double most, double guess) {
  constexpr int kSteps = 40;
  constexpr double kSettled = 1e-6;  // relative; the step after it would be its square
  const PremiumPanel* panel = nullptr;
  double low = 0, high = most, s = guess;
  Found found{Reached::nothing, 0, 0, 0};
  for (int step = 0; step < kSteps; ++step) {
    panel = side.panel(s, panel);
    if (!panel) break;
    const PanelPremium premium = premium_at(*panel, q.log_spot, s);
    if (premium.exercised) {  // the price is intrinsic, less than the one asked
      low = s;
      s = 0.5 * (low + high);
      continue;
    }
    const double european = side.european(q, s);
    const double miss = european + premium.value - q.price;
    (miss < 0 ? low : high) = s;
    const double vega = q.scale * normalised_vega(-std::abs(q.log_forward), s);
    const double moved = s - miss / (vega + premium.slope);
    if (std::abs(moved - s) <= kSettled * s) {
      const double sure = kDiscretisation * premium.value * q.per_spot;
      const bool good = premium.error * q.per_spot + sure <= kMargin * AmericanInverter::kPromise;
      found = {good ? Reached::good : Reached::rough, moved, european + (moved - s) * vega,
               vega + premium.slope};
      panel = good || sure > kMargin * AmericanInverter::kPromise ? nullptr : side.finer(*panel, s);
      if (!panel) break;
      low = 0, high = most;
      continue;
    }
    s = moved > low && moved < high ? moved : 0.5 * (low + high);
  }
  return found;
}

AmericanTerms terms_of(const AmericanColumnTerms& t, PutCall side, double strike) {
  return {side, t.spot, strike, t.rate, t.carry_yield, t.year_fraction};
}

AmericanVolStatus status_of(VolStatus status) {
  switch (status) {
    case VolStatus::ok: return AmericanVolStatus::ok;
    case VolStatus::below_intrinsic: return AmericanVolStatus::below_intrinsic;
    case VolStatus::above_bound: return AmericanVolStatus::above_bound;
    case VolStatus::not_finite: break;
  }
  return AmericanVolStatus::not_finite;
}

// ok where there is a volatility to look for.
AmericanVolStatus judge(const AmericanTerms& terms, double price) {
  const bool is_put = terms.put_call == PutCall::put;
  const double intrinsic =
      std::max(0.0, is_put ? terms.strike - terms.spot : terms.spot - terms.strike);
  const double floor = american_floor(terms), same = kSame * std::max(terms.spot, terms.strike);
  if (price >= american_ceiling(terms)) return AmericanVolStatus::above_bound;
  if (intrinsic > 0 && std::abs(price - intrinsic) <= same && floor <= intrinsic + same)
    return AmericanVolStatus::immediate_exercise;
  return price > floor ? AmericanVolStatus::ok : AmericanVolStatus::below_intrinsic;
}

bool positive(double v) { return std::isfinite(v) && v > 0; }

bool sound(const AmericanColumnTerms& t) {
  constexpr double kMostRate = 600;  // beyond, discount factors leave the doubles
  return positive(t.spot) && positive(t.year_fraction) &&
         std::abs(t.rate * t.year_fraction) < kMostRate &&
         std::abs(t.carry_yield * t.year_fraction) < kMostRate;
}

// Volatilities of one expiry, in two passes: what is out of the money first, where the European
// volatility of the price is a good guess; then the rest, from the volatility nearest the money.
class Column {
 public:
  Column(const AmericanInverter& inverter, const PanelMaker& maker,
         const AmericanColumnTerms& terms, const PriceColumns& in, const AmericanVolColumns& out)
      : inverter_(inverter),
        terms_(terms),
        in_(in),
        out_(out),
        root_t_(std::sqrt(terms.year_fraction)),
        puts_(maker, terms.rate * terms.year_fraction, terms.carry_yield * terms.year_fraction),
        calls_(maker, terms.carry_yield * terms.year_fraction, terms.rate * terms.year_fraction) {}

  AmericanCounts run() {
    const double t = terms_.year_fraction;
    implied_vols({terms_.spot * std::exp((terms_.rate - terms_.carry_yield) * t),
                  std::exp(-terms_.rate * t), t},
                 in_, out_.vols, european_statuses());
    std::vector<std::size_t> in_the_money;
    for (std::size_t i = 0; i < in_.prices.size(); ++i)
      if (wants_search(i)) {
        if (log_spot_of_put(i) < 0)
          in_the_money.push_back(i);
        else
          search_from(i, out_.vols[i] * root_t_);
      }
    for (const std::size_t i : in_the_money)
      search_from(i, std::min(out_.vols[i], at_the_money_) * root_t_);
    counts_.panels = puts_.made() + calls_.made();
    return counts_;
  }

 private:
  std::span<VolStatus> european_statuses() {
    european_.resize(in_.prices.size());
    return european_;
  }

  bool is_put(std::size_t i) const { return in_.put_calls[i] == PutCall::put; }
  double log_spot_of_put(std::size_t i) const {
    const double ratio = terms_.spot / in_.strikes[i];
    return is_put(i) ? ratio - 1 : 1 / ratio - 1;  // its sign is all that counts
  }

  void settle(std::size_t i, AmericanVolStatus status, double vol, double european) {
    out_.statuses[i] = status;
    out_.vols[i] = status == AmericanVolStatus::ok ? vol : 0.0;
    out_.european_prices[i] = status == AmericanVolStatus::ok ? european : 0.0;
  }

  // Settles what needs no search.
  bool wants_search(std::size_t i) {
    const double price = in_.prices[i];
    if (european_[i] == VolStatus::not_finite) {
      settle(i, AmericanVolStatus::not_finite, 0, 0);
      return false;
    }
    const auto kind = exercise_kind(in_.put_calls[i], terms_.rate, terms_.carry_yield);
    if (kind == ExerciseKind::never) {
      settle(i, status_of(european_[i]), out_.vols[i], price);
      return false;
    }
    if (kind == ExerciseKind::between) {
      settle(i, AmericanVolStatus::two_boundaries, 0, 0);
      return false;
    }
    const auto status = judge(terms_of(terms_, in_.put_calls[i], in_.strikes[i]), price);
    if (status != AmericanVolStatus::ok) settle(i, status, 0, 0);
    return status == AmericanVolStatus::ok;
  }

  // The European volatility of the price is the bound from above: the American price is more.
  void search_from(std::size_t i, double guess) {
    Found found{Reached::nothing, 0, 0, 0};
    const double strike = in_.strikes[i];
    Side& side = is_put(i) ? puts_ : calls_;
    UnitQuote q = is_put(i) ? side.quote(terms_.spot, strike, in_.prices[i])
                            : side.quote(strike, terms_.spot, in_.prices[i]);
    q.per_spot = q.size / terms_.spot;
    if (european_[i] == VolStatus::ok)
      found = search(side, q, out_.vols[i] * root_t_ * (1 + 1e-12), guess);
    if (found.reached != Reached::good) {
      polish(i, found, q.size);
      return;
    }
    settle(i, AmericanVolStatus::ok, found.total_vol / root_t_, found.european * q.size);
    if (q.log_spot < nearest_ && q.log_spot >= 0) {
      nearest_ = q.log_spot;
      at_the_money_ = out_.vols[i];
    }
  }

  void polish(std::size_t i, const Found& found, double size) {
    ++counts_.polished;
    const auto terms = terms_of(terms_, in_.put_calls[i], in_.strikes[i]);
    AmericanVol better{AmericanVolStatus::not_converged, 0, 0};
    if (found.reached == Reached::rough)
      better = inverter_.improve(terms, in_.prices[i], found.total_vol / root_t_,
                                 found.slope * size * root_t_);
    if (better.status != AmericanVolStatus::ok)
      better = inverter_.invert_by_reference(terms, in_.prices[i]);
    settle(i, better.status, better.vol, better.european_price);
  }

  const AmericanInverter& inverter_;
  AmericanColumnTerms terms_;
  const PriceColumns& in_;
  const AmericanVolColumns& out_;
  double root_t_;
  Side puts_, calls_;
  std::vector<VolStatus> european_;
  double nearest_ = std::numeric_limits<double>::infinity();
  double at_the_money_ = std::numeric_limits<double>::infinity();
  AmericanCounts counts_;
};

}  // namespace

std::string_view word(AmericanVolStatus status) {
  constexpr std::array<std::string_view, 7> kWords{
      "ok",         "below intrinsic", "immediate exercise", "above bound",
      "not finite", "two boundaries",  "not converged"};
  return kWords[static_cast<std::size_t>(status)];
}

AmericanColumnTerms american_terms(double spot, const ColumnTerms& terms) {
  const double rate = -std::log(terms.discount_factor) / terms.year_fraction;
  return {spot, rate, rate - log_moneyness_of_forward(terms.forward, spot) / terms.year_fraction,
          terms.year_fraction};
}

AmericanCounts AmericanInverter::invert(const AmericanColumnTerms& terms,
                                        const PriceColumns& columns,
                                        const AmericanVolColumns& out) const {
  if (sound(terms)) return Column(*this, maker_, terms, columns, out).run();
  std::fill(out.vols.begin(), out.vols.end(), 0.0);
  std::fill(out.european_prices.begin(), out.european_prices.end(), 0.0);
  std::fill(out.statuses.begin(), out.statuses.end(), AmericanVolStatus::not_finite);
  return {};
}

AmericanVol AmericanInverter::improve(const AmericanTerms& terms, double price, double vol,
                                      double vega) const {
  constexpr int kSteps = 5;
  constexpr double kMet = 1e-9;  // of the spot
  for (int step = 0; step < kSteps && vol > 0; ++step) {
    const AmericanPrice at = engine_.price(terms, vol);
    if (at.status != AmericanStatus::ok || at.immediate) break;
    if (std::abs(at.price - price) <= kMet * terms.spot)
      return {AmericanVolStatus::ok, vol, at.european};
    vol -= (at.price - price) / vega;
  }
  return {AmericanVolStatus::not_converged, 0, 0};
}

AmericanVol AmericanInverter::invert_by_reference(const AmericanTerms& terms, double price) const {
  constexpr auto kFailed = AmericanVolStatus::not_converged;
  if (!std::isfinite(price) || !positive(terms.strike) ||
      !sound({terms.spot, terms.rate, terms.carry_yield, terms.year_fraction}))
    return {AmericanVolStatus::not_finite, 0, 0};
  const auto kind = exercise_kind(terms.put_call, terms.rate, terms.carry_yield);
  if (kind == ExerciseKind::between) return {AmericanVolStatus::two_boundaries, 0, 0};
  const auto status = judge(terms, price);
  if (status != AmericanVolStatus::ok) return {status, 0, 0};
  const double root_t = std::sqrt(terms.year_fraction);
  bool converged = true;
  AmericanPrice at{};
  const auto miss = [&](double s) {
    at = engine_.price(terms, s / root_t);
    converged = converged && at.status == AmericanStatus::ok;
    return at.price - price;
  };
  constexpr double kMost = 1e6;
  double low = 0, high = 0.25;
  while (converged && high < kMost && miss(high) < 0) low = high, high *= 2;
  if (!converged) return {kFailed, 0, 0};
  if (high >= kMost) return {AmericanVolStatus::above_bound, 0, 0};
  std::uintmax_t steps = 100;
  const auto [below, above] =
      boost::math::tools::toms748_solve(miss, low, high, american_floor(terms) - price, miss(high),
                                        boost::math::tools::eps_tolerance<double>(44), steps);
  const double s = 0.5 * (below + above);
  miss(s);
  if (!converged) return {kFailed, 0, 0};
  return {AmericanVolStatus::ok, s / root_t, at.european};
}

}  // namespace duskgrid::pricing
