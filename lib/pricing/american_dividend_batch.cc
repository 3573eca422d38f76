#include "pricing/american_dividend_batch.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <map>
#include <optional>
#include <vector>

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;

// Widest interval of volatility that one table covers, and how far it reaches beyond.
constexpr double kRatio = 1.9, kOverlap = 1.02;
constexpr double kLeastTotalVol = 2e-3, kMostTotalVol = 6;
// Rates and dividends move the spot by at most this many total volatilities.
constexpr double kMostMoved = 20;
// A price this near intrinsic, in units of the larger of spot and strike, is intrinsic.
constexpr double kSame = 1e-12;

bool positive(double v) { return std::isfinite(v) && v > 0; }

std::vector<Dividend> inside(std::span<const Dividend> dividends, double time) {
  std::vector<Dividend> out;
  for (const Dividend& d : dividends)
    if (!(d.time <= 0 || d.time >= time) && d.amount != 0) out.push_back(d);
  std::stable_sort(out.begin(), out.end(),
                   [](const Dividend& a, const Dividend& b) { return a.time < b.time; });
  return out;
}

double after(const Dividend& d, double spot) {
  return d.kind == DividendKind::cash ? spot - d.amount : spot * (1 - d.amount);
}

// What both sides of an expiry share; times in units of the time to expiry.
struct Expiry {
  AmericanColumnTerms terms;
  Shortfall shortfall;
  std::vector<PanelDividend> dividends;  // latest first
  double forward, discount_factor, moved;
};

// Nothing where an argument is not sound.
std::optional<Expiry> expiry_of(const DividendColumnTerms& d,
                                const std::vector<Dividend>& dividends) {
  constexpr double kMostRate = 20;
  const AmericanColumnTerms& t = d.terms;
  if (!positive(t.spot) || !positive(t.year_fraction) ||
      !(std::abs(t.rate * t.year_fraction) < kMostRate) ||
      !(std::abs(t.carry_yield * t.year_fraction) < kMostRate))
    return {};
  Expiry out{t, d.shortfall, {}, t.spot, std::exp(-t.rate * t.year_fraction), 0};
  double time = 0;
  for (const Dividend& dividend : dividends) {
    if (!std::isfinite(dividend.time) || !positive(dividend.amount)) return {};
    out.forward *= std::exp((t.rate - t.carry_yield) * (dividend.time - time));
    time = dividend.time;
    const double left = after(dividend, out.forward);
    if (!positive(left)) return {};
    const double share =
        dividend.kind == DividendKind::cash ? dividend.amount / out.forward : dividend.amount;
    out.dividends.push_back({time / t.year_fraction, dividend.kind, dividend.amount, share});
    out.moved -= std::log1p(-share);
    out.forward = left;
  }
  out.forward *= std::exp((t.rate - t.carry_yield) * (t.year_fraction - time));
  out.moved += std::abs(t.rate - t.carry_yield) * t.year_fraction;
  std::reverse(out.dividends.begin(), out.dividends.end());
  return out;
}

// The best of exercise at expiry, now, and next to a dividend, when nothing moves.
double floor_of(const Expiry& e, PutCall side, double strike) {
  const AmericanColumnTerms& t = e.terms;
  const auto worth = [&](double spot, double time) {
    const double call = spot - strike;
    return std::exp(-t.rate * time) * std::max(0.0, side == PutCall::call ? call : -call);
  };
  double spot = t.spot, time = 0, most = worth(spot, 0);
  for (auto d = e.dividends.rbegin(); d != e.dividends.rend(); ++d) {
    const double then = d->time * t.year_fraction;
    spot *= std::exp((t.rate - t.carry_yield) * (then - time));
    time = then;
    most = std::max(most, worth(spot, time));
    spot = d->kind == DividendKind::cash ? spot - d->amount : spot * (1 - d->amount);
    most = std::max(most, worth(spot, time));
  }
  return std::max(most, worth(e.forward, t.year_fraction));
}

struct Interval {
  double low, high;  // of total volatility
};

// A side of one expiry, and the tables made so far.
class Side {
 public:
  Side(const Expiry& e, PutCall put_call, Interval first, Interval strikes)
      : moved_(e.moved),
        first_(first),
        strikes_(strikes),
        is_put_(put_call == PutCall::put),
        problem_{put_call, e.terms.rate * e.terms.year_fraction,
                 e.terms.carry_yield * e.terms.year_fraction, e.shortfall, e.dividends} {}

  bool is_put() const { return is_put_; }
  std::size_t made() const { return panels_.size(); }

  const DividendPanel* panel(double s) {
    if (last_ && s >= last_->low && s <= last_->high) return last_;
    if (!(s >= kLeastTotalVol && s <= kMostTotalVol)) return nullptr;
    int at = 0;
    if (s > first_.high) at = 1 + int(std::floor(std::log(s / first_.high) / std::log(kRatio)));
    if (s < first_.low) at = -1 - int(std::floor(std::log(first_.low / s) / std::log(kRatio)));
    Interval wanted = first_;
    if (at > 0)
      wanted = {first_.high * std::pow(kRatio, at - 1), first_.high * std::pow(kRatio, at)};
    if (at < 0) wanted = {first_.low * std::pow(kRatio, at), first_.low * std::pow(kRatio, at + 1)};
    if (moved_ > kMostMoved * wanted.low) return nullptr;
    auto found = panels_.find(at);
    if (found == panels_.end())
      found = panels_
                  .emplace(at, make_dividend_panel(problem_, wanted.low / kOverlap,
                                                   wanted.high * kOverlap, strikes_.low,
                                                   strikes_.high, options()))
                  .first;
    last_ = &found->second;
    return last_;
  }

 private:
  // More nodes where cash dividends differ more from strike to strike.
  DividendPanelOptions options() const {
    DividendPanelOptions out;
    if (strikes_.high > 3 * strikes_.low) out.strikes = 8;
    return out;
  }

  double moved_;
  Interval first_, strikes_;
  bool is_put_;
  DividendProblem problem_;
  std::map<int, DividendPanel> panels_;
  const DividendPanel* last_ = nullptr;
};

// A quote in units of its strike.
struct UnitQuote {
  double strike, price, met;  // met: a miss that is none
  double log_spot, log_forward, scale, intrinsic;
  double discount_factor;
};

struct Priced {
  double american, european;
  bool exercised, sure;
};

class Searcher {
 public:
  Searcher(Side& side, const UnitQuote& q) : side_(side), q_(q) {}

  // False where there is no table.
  bool price(double s, Priced& out) {
    const DividendPanel* panel = side_.panel(s);
    if (!panel) return false;
    if (panel != panel_) weights_ = strike_weights(*panel, q_.strike);
    panel_ = panel;
    const DividendExcess x = excess_at(*panel, weights_, side_.is_put(), q_.log_spot, s);
    const double black = q_.intrinsic + q_.scale * normalised_price(-std::abs(q_.log_forward), s);
    out = {black + x.correction + x.premium, black + x.correction, x.exercised, x.sure};
    return true;
  }

  // Newton's method with Black's slope, then the secant, between bounds; halves them where that is
  // slow: in the money before an ex-date the price hardly moves with the volatility at first.
  AmericanVolStatus run(double guess, double most, double& s, Priced& at) {
    constexpr int kSteps = 160, kPatience = 4;
    constexpr double kPinned = 1e-10;
    double low = kLeastTotalVol, high = most, last_s = 0, last_miss = 0, width = high - low;
    s = std::clamp(guess, low, high);
    bool above = false, below = false, has_last = false;
    for (int step = 0; step < kSteps; ++step) {
      if (!price(s, at)) {
        low = std::max(low, s);  // no table that far down
        s = 0.5 * (low + high);
        if (high - low <= kPinned * high) break;
        continue;
      }
      const double miss = at.exercised ? -1 : at.american - q_.price;
      if (!at.exercised && std::abs(miss) <= q_.met) return AmericanVolStatus::ok;
      (miss < 0 ? low : high) = s;
      (miss < 0 ? below : above) = true;
      if (high - low <= kPinned * high) {
        if (above || high >= kMostTotalVol) break;
        high = kMostTotalVol;  // the bound was a guess
      }
      double moved = 0;
      if (!at.exercised) {
        const double secant = has_last ? (miss - last_miss) / (s - last_s) : 0;
        const double vega = q_.scale * normalised_vega(-std::abs(q_.log_forward), s);
        moved = s - miss / (secant > 0.2 * vega ? secant : vega);
        last_s = s, last_miss = miss, has_last = true;
      }
      const bool slow = step % kPatience == kPatience - 1 && high - low > 0.5 * width;
      if (step % kPatience == kPatience - 1) width = high - low;
      s = moved > low && moved < high && !slow ? moved : 0.5 * (low + high);
    }
    if (!(high - low <= kPinned * high)) return AmericanVolStatus::not_converged;
    if (above && below) return AmericanVolStatus::ok;  // pinned between two tables
    return above ? AmericanVolStatus::below_intrinsic
                 : (below ? AmericanVolStatus::above_bound : AmericanVolStatus::not_converged);
  }

 private:
  Side& side_;
  const UnitQuote& q_;
  const DividendPanel* panel_ = nullptr;
  StrikeWeights weights_{};
};

class Column {
 public:
  Column(const Expiry& e, const PriceColumns& in, const AmericanVolColumns& out)
      : e_(e), in_(in), out_(out), root_t_(std::sqrt(e.terms.year_fraction)) {}

  AmericanCounts run() {
    european_.resize(in_.prices.size());
    implied_vols({e_.forward, e_.discount_factor, e_.terms.year_fraction}, in_, out_.vols,
                 european_);
    const Interval first = vols(), strikes = strike_range();
    Side puts(e_, PutCall::put, first, strikes), calls(e_, PutCall::call, first, strikes);
    std::vector<std::size_t> in_the_money;
    for (std::size_t i = 0; i < in_.prices.size(); ++i) {
      if (!wants_search(i)) continue;
      if (is_out(i))
        search(i, is_put(i) ? puts : calls, out_.vols[i] * root_t_);
      else
        in_the_money.push_back(i);
    }
    for (const std::size_t i : in_the_money) search(i, is_put(i) ? puts : calls, near_);
    return {puts.made() + calls.made(), 0};
  }

 private:
  bool is_put(std::size_t i) const { return in_.put_calls[i] == PutCall::put; }
  bool is_out(std::size_t i) const {
    return european_[i] == VolStatus::ok &&
           (is_put(i) ? in_.strikes[i] <= e_.forward : in_.strikes[i] >= e_.forward);
  }

  void settle(std::size_t i, AmericanVolStatus status, double vol, double european) {
    const bool ok = status == AmericanVolStatus::ok;
    out_.statuses[i] = status;
    out_.vols[i] = ok ? vol : 0.0;
    out_.european_prices[i] = ok ? european : 0.0;
  }

  // The interval of the first table: all volatilities out of the money if they fit, else about
  // their median.
  Interval vols() {
    std::vector<double> all;
    for (std::size_t i = 0; i < in_.prices.size(); ++i)
      if (is_out(i)) all.push_back(std::clamp(out_.vols[i] * root_t_, 1e-2, 4.0));
    if (all.empty()) all.push_back(std::clamp(0.3 * root_t_, 1e-2, 4.0));
    std::sort(all.begin(), all.end());
    near_ = all[all.size() / 2];
    // The American price has a volatility below the European one.
    constexpr double kBelow = 0.94, kAbove = 1.02;
    const double low = kBelow * all.front(), high = kAbove * all.back();
    if (high <= kRatio * low) return {low, high};
    return {near_ / std::sqrt(kRatio), near_ * std::sqrt(kRatio)};
  }

  Interval strike_range() const {
    constexpr double kFar = 8;  // strikes beyond are tabled as if at it
    Interval out{std::numeric_limits<double>::infinity(), 0};
    for (std::size_t i = 0; i < in_.prices.size(); ++i)
      if (european_[i] != VolStatus::not_finite) {
        out.low = std::min(out.low, in_.strikes[i]);
        out.high = std::max(out.high, in_.strikes[i]);
      }
    const double spot = e_.terms.spot;
    return {0.98 * std::max(spot / kFar, std::min(out.low, spot)),
            1.02 * std::min(spot * kFar, std::max(out.high, spot))};
  }

  bool wants_search(std::size_t i) {
    const double price = in_.prices[i], strike = in_.strikes[i], spot = e_.terms.spot;
    auto status = AmericanVolStatus::ok;
    if (european_[i] == VolStatus::not_finite) {
      status = AmericanVolStatus::not_finite;
    } else if (exercise_kind(in_.put_calls[i], e_.terms.rate, e_.terms.carry_yield) ==
               ExerciseKind::between) {
      status = AmericanVolStatus::two_boundaries;
    } else {
      const double intrinsic = std::max(0.0, is_put(i) ? strike - spot : spot - strike);
      const double floor = floor_of(e_, in_.put_calls[i], strike);
      const double same = kSame * std::max(spot, strike);
      const AmericanTerms terms{
          in_.put_calls[i],      spot, strike, e_.terms.rate, e_.terms.carry_yield,
          e_.terms.year_fraction};
      if (price >= american_ceiling(terms))
        status = AmericanVolStatus::above_bound;
      else if (intrinsic > 0 && std::abs(price - intrinsic) <= same && floor <= intrinsic + same)
        status = AmericanVolStatus::immediate_exercise;
      else if (price <= floor)
        status = AmericanVolStatus::below_intrinsic;
    }
    if (status != AmericanVolStatus::ok) settle(i, status, 0, 0);
    return status == AmericanVolStatus::ok;
  }

  UnitQuote unit(std::size_t i) const {
    constexpr double kMet = 1e-10;  // of the spot
    const double strike = in_.strikes[i], spot = e_.terms.spot, df = e_.discount_factor;
    UnitQuote q{};
    q.strike = std::clamp(strike, spot / 8, spot * 8);
    q.price = in_.prices[i] / strike;
    q.met = kMet * spot / strike;
    q.log_spot = log_moneyness_of_forward(spot, strike);
    q.log_forward = log_moneyness_of_forward(e_.forward, strike);
    q.scale = df * std::exp(0.5 * q.log_forward);
    const double call = std::expm1(q.log_forward);
    q.intrinsic = df * std::max(0.0, is_put(i) ? -call : call);
    return q;
  }

  void search(std::size_t i, Side& side, double guess) {
    const UnitQuote q = unit(i);
    const double most =
        european_[i] == VolStatus::ok
            ? std::clamp(1.2 * out_.vols[i] * root_t_, 2 * kLeastTotalVol, kMostTotalVol)
            : kMostTotalVol;
    double s = 0;
    Priced at{};
    Searcher searcher(side, q);
    auto status = searcher.run(std::min(guess, 0.99 * most), most, s, at);
    if (!at.sure) status = AmericanVolStatus::not_converged;
    // Where exercise never pays, the price is the European one.
    const bool never = side.is_put() && exercise_kind(PutCall::put, e_.terms.rate,
                                                      e_.terms.carry_yield) == ExerciseKind::never;
    settle(i, status, s / root_t_, never ? in_.prices[i] : at.european * in_.strikes[i]);
  }

  const Expiry& e_;
  const PriceColumns& in_;
  const AmericanVolColumns& out_;
  double root_t_, near_ = 0;
  std::vector<VolStatus> european_;
};

}  // namespace

AmericanCounts DividendInverter::invert(const DividendColumnTerms& terms,
                                        const PriceColumns& columns,
                                        const AmericanVolColumns& out) const {
  const auto dividends = inside(terms.dividends, terms.terms.year_fraction);
  if (dividends.empty()) return without_.invert(terms.terms, columns, out);
  if (const auto e = expiry_of(terms, dividends)) return Column(*e, columns, out).run();
  std::fill(out.vols.begin(), out.vols.end(), 0.0);
  std::fill(out.european_prices.begin(), out.european_prices.end(), 0.0);
  std::fill(out.statuses.begin(), out.statuses.end(), AmericanVolStatus::not_finite);
  return {};
}

}  // namespace duskgrid::pricing
