#include "adversarial_chains.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <optional>
#include <random>
#include <utility>

#include "pricing/black.h"
#include "pricing/invert.h"

namespace duskgrid::oracle {
namespace {

using surface::FitQuote;
using surface::FitSlice;
using surface::SliceParameters;

constexpr double kDay = 1.0 / 365;
constexpr double kTick = 1e-4;  // 0.01 on a forward of 100

// Draws that are the same on every platform, which those of <random>'s distributions are not.
class Draw {
 public:
  explicit Draw(std::uint64_t seed) : random_(seed) {}
  double unit() { return static_cast<double>(random_() >> 11) * 0x1p-53; }  // [0, 1)
  double between(double low, double high) { return low + unit() * (high - low); }
  // Even in the logarithm.
  double scale(double low, double high) { return low * std::pow(high / low, unit()); }
  std::size_t whole(std::size_t low, std::size_t high) {  // both included
    return low + static_cast<std::size_t>(unit() * static_cast<double>(high - low + 1));
  }
  bool chance(double p) { return unit() < p; }
  double sign() { return chance(0.5) ? 1 : -1; }

 private:
  std::mt19937_64 random_;
};

// Total volatility of an out-of-the-money price over the forward; nothing at or above its bound,
// 0 at or below intrinsic.
std::optional<double> total_vol_of(double k, double price) {
  if (price <= 0) return 0.0;
  const double beta = price * std::exp(-0.5 * k);
  if (beta >= std::exp(-0.5 * std::abs(k))) return std::nullopt;
  return pricing::invert_normalised(-std::abs(k), beta);
}

double otm_price(double k, double total_vol) {
  return std::exp(0.5 * k) * pricing::normalised_price(-std::abs(k), total_vol);
}

// --- Truths -------------------------------------------------------------------------------------

struct Truth {
  std::vector<double> times;
  std::vector<Smile> smiles;
};

std::vector<double> spread_out_times(Draw& draw, std::size_t count, double first) {
  std::vector<double> out{first};
  while (out.size() < count) out.push_back(out.back() * draw.between(1.1, 2.2) + kDay);
  return out;
}

std::vector<double> some_times(Draw& draw, std::size_t least, std::size_t most) {
  return spread_out_times(draw, draw.whole(least, most), draw.between(2, 30) * kDay);
}

struct Skew {
  double rho, step;          // of the first slice; largest change a slice
  double psi_low, psi_high;  // share of the way from the least to the largest psi
};

// The steepest a slice may be: Gatheral & Jacquier 2014, theorem 4.2.
double steepest_psi(double theta, double rho) {
  const double slope = 1 + std::abs(rho);
  return std::min(4 / slope, std::sqrt(4 * theta / slope));
}

// eSSVI free of arbitrage by the recursion of A. Mingone, arXiv 2204.00312 (2022), from a level of
// volatility and one forward variance for each stretch of time.
Truth essvi(Draw& draw, std::vector<double> times, const Skew& skew) {
  const std::size_t n = times.size();
  const double level = draw.scale(0.06, 0.9);
  std::vector<SliceParameters> s(n);
  std::vector<double> p(n, 1), reach(n);
  for (std::size_t i = 0; i < n; ++i) {
    const double vol = level * std::exp(draw.between(-0.3, 0.3));
    const double gap = times[i] - (i > 0 ? times[i - 1] : 0);
    s[i].theta = vol * vol * gap;
    s[i].rho = skew.rho;
    if (i > 0) {
      // Little time, little change: a new rho costs variance.
      const double step = std::min(skew.step, 0.3 * gap / times[i]);
      s[i].rho = std::clamp(s[i - 1].rho + draw.between(-step, step), -0.99, 0.99);
      p[i] = std::max((1 + s[i - 1].rho) / (1 + s[i].rho), (1 - s[i - 1].rho) / (1 - s[i].rho));
      s[i].theta += s[i - 1].theta * p[i];
    }
  }
  for (std::size_t i = n; i-- > 0;) {
    reach[i] = steepest_psi(s[i].theta, s[i].rho);
    if (i + 1 < n) reach[i] = std::min(reach[i], reach[i + 1] / p[i + 1]);
  }
  for (std::size_t i = 0; i < n; ++i) {
    const double low = i > 0 ? s[i - 1].psi * p[i] : 0;
    const double high =
        i > 0 ? std::min(reach[i], s[i - 1].psi * s[i].theta / s[i - 1].theta) : reach[i];
    s[i].psi = std::lerp(low, high, draw.between(skew.psi_low, skew.psi_high));
  }
  Truth out{std::move(times), {}};
  for (const auto& slice : s)
    out.smiles.emplace_back([slice](double k) { return surface::smile_at(slice, k).w; });
  return out;
}

struct Component {
  double weight, forward, total_vol;
};

// Out-of-the-money price of a mixture whose forward is 1.
double mixture_price(const std::vector<Component>& mixture, double k) {
  const auto side = k < 0 ? quotes::PutCall::put : quotes::PutCall::call;
  double price = 0;
  for (const auto& c : mixture)
    price += c.weight * pricing::black_price({side, c.forward, std::exp(k), 1}, c.total_vol);
  return price;
}

Smile smile_of(std::vector<Component> mixture) {
  return [mixture = std::move(mixture)](double k) {
    const double s = total_vol_of(k, mixture_price(mixture, k)).value();
    return s * s;
  };
}

// Business time: the clock runs faster over some stretches than over others.
std::vector<double> uneven_clock(Draw& draw, const std::vector<double>& times) {
  std::vector<double> out;
  double before = 0, clock = 0;
  for (const double t : times) {
    out.push_back(clock += (t - std::exchange(before, t)) * std::exp(draw.between(-0.5, 0.5)));
  }
  return out;
}

// One of two vols, times a rare fall or else a small rise, of mean 1 and independent. All grow as
// the root of business time, so every marginal is above the one before in the convex order. The
// smiles are skewed, with humps that no eSSVI slice has where the fall is many deviations.
Truth mixed_lognormals(Draw& draw, std::vector<double> times) {
  const auto clock = uneven_clock(draw, times);
  const double vol = draw.scale(0.06, 0.6), wider = vol * draw.between(1, 2);
  const double share = draw.between(0.05, 0.5), rare = draw.between(0.05, 0.4);
  const double fall =
      std::min(vol * draw.between(0.3, 2.5), 0.6 / std::sqrt(clock.back()));  // a root year
  Truth out{std::move(times), {}};
  for (const double t : clock) {
    const double root = std::sqrt(t), down = fall * root, up = down * rare / (1 - rare);
    std::vector<Component> mixture;
    for (const auto& [w, s] : {std::pair{1 - share, vol}, {share, wider}}) {
      mixture.push_back({w * rare, 1 - down, s * root});
      mixture.push_back({w * (1 - rare), 1 + up, s * root});
    }
    out.smiles.push_back(smile_of(std::move(mixture)));
  }
  return out;
}

Truth ordinary(Draw& draw, std::vector<double> times) {
  if (draw.chance(0.5)) return mixed_lognormals(draw, std::move(times));
  return essvi(draw, std::move(times), {draw.between(-0.8, 0.3), 0.08, 0.1, 0.8});
}

// Two vols that the market does not know apart, and from the announcement on a jump up or down with
// mean 1: marginals of one martingale, so free of arbitrage.
Truth announced(Draw& draw) {
  const double event = draw.between(1, 12) * kDay;
  std::vector<double> times;
  for (std::size_t i = draw.whole(0, 2), n = i + 1; i > 0; --i)
    times.push_back(event * static_cast<double>(n - i) / static_cast<double>(n));
  const auto after = spread_out_times(draw, draw.whole(2, 6), event + draw.scale(0.2, 3) * kDay);
  times.insert(times.end(), after.begin(), after.end());
  const double vol = draw.between(0.08, 0.3), wider = vol * draw.between(1.2, 2.5);
  const double share = draw.between(0.1, 0.5), up = draw.between(0.3, 0.7);
  const double rise = 1 + draw.between(0.02, 0.12), fall = (1 - up * rise) / (1 - up);
  Truth out{times, {}};
  for (const double t : times) {
    std::vector<Component> mixture;
    for (const auto& [w, s] : {std::pair{1 - share, vol}, {share, wider}}) {
      const double total = s * std::sqrt(t);
      if (t <= event) {
        mixture.push_back({w, 1, total});
      } else {
        mixture.push_back({w * up, rise, total});
        mixture.push_back({w * (1 - up), fall, total});
      }
    }
    out.smiles.push_back(smile_of(std::move(mixture)));
  }
  return out;
}

// Total volatility s0 + a (k - k1)+ + b (k0 - k)+ with s0 and the kinks growing as sqrt(t). It
// grows in t while a k1 < s0, and g = ((s0 - a k1)/s)^2 - (a s/2)^2 beyond the kink, positive over
// eight deviations for the slopes and vols drawn; at the kinks the density has atoms, all positive.
Truth piecewise_linear(Draw& draw) {
  const auto times = some_times(draw, 1, 5);
  const double vol = draw.scale(0.06, 0.3);
  const double left = draw.between(0.05, 0.25), right = draw.between(0, 0.2);
  const double low = draw.between(0, 1.5), high = draw.between(0, 1.5);
  Truth out{times, {}};
  for (const double t : times) {
    const double s0 = vol * std::sqrt(t);
    out.smiles.emplace_back([=](double k) {
      const double s =
          s0 + right * std::max(k - high * s0, 0.0) + left * std::max(-low * s0 - k, 0.0);
      return s * s;
    });
  }
  return out;
}

Truth level(Draw& draw) {
  Truth out{some_times(draw, 1, 10), {}};
  const double vol = draw.scale(0.03, 1.2);
  for (const double t : out.times)
    out.smiles.emplace_back([w = vol * vol * t](double) { return w; });
  return out;
}

// --- Quotes around a truth ----------------------------------------------------------------------

struct Style {
  std::size_t count = 30;
  double low = -3.5, high = 2.5;  // range, in deviations
  double half_spread = 0.01;      // at the money, of the volatility there
  double noise = 0.3;             // of the mid, in half-spreads
};

Style some_style(Draw& draw) {
  return {draw.whole(12, 50), draw.between(-5, -2), draw.between(1.5, 4), draw.scale(0.003, 0.03),
          0.3};
}

double deviation(const Smile& smile) { return std::sqrt(smile(0)); }

// Unevenly spaced, at least 0.4 of the mean distance apart. Where two narrow humps are far apart
// the deviations lead to prices that are no numbers: there is no strike there.
std::vector<double> strikes(Draw& draw, const Smile& smile, const Style& style) {
  constexpr double kLeastPrice = 1e-30;
  const double unit = deviation(smile);
  const double step =
      (style.high - style.low) / static_cast<double>(std::max<std::size_t>(style.count, 2) - 1);
  std::vector<double> out;
  for (std::size_t i = 0; i < style.count; ++i) {
    const double place = style.count == 1 ? draw.between(0.4, 0.6) : static_cast<double>(i);
    const double k = unit * (style.low + step * (place + draw.between(-0.3, 0.3)));
    if (otm_price(k, std::sqrt(smile(k))) > kLeastPrice) out.push_back(k);
  }
  if (out.empty()) out.push_back(0);
  return out;
}

// Bid and ask in volatility, the mid off by `offset` half-spreads.
FitQuote in_vol(double k, double vol, double half_spread, double offset) {
  const double mid = vol + offset * half_spread;
  return {k, mid, half_spread, std::max(mid - half_spread, 0.0), mid + half_spread};
}

// Bid and ask in price over the forward; nothing if the ask buys no volatility.
std::optional<FitQuote> in_price(double k, double t, double bid, double ask) {
  const auto low = total_vol_of(k, bid), high = total_vol_of(k, ask);
  const auto mid = total_vol_of(k, 0.5 * (std::max(bid, 0.0) + ask));
  if (!low || !high || !mid) return std::nullopt;
  const double root = std::sqrt(t);
  return FitQuote{k, *mid / root, 0.5 * (*high - *low) / root, *low / root, *high / root};
}

// Half-spread of volatility that widens away from the money.
double widening(Draw& draw, const Smile& smile, double t, const Style& style, double k) {
  const double z = k / deviation(smile);
  return style.half_spread * std::sqrt(smile(0) / t) * (1 + 0.3 * z * z) * draw.between(0.7, 1.3);
}

double vol_of(const Smile& smile, double t, double k) { return std::sqrt(smile(k) / t); }

// Keeps the mid at a tenth of the truth or more and the truth inside.
FitQuote around(Draw& draw, const Smile& smile, double t, double k, const Style& style,
                double offset) {
  const double vol = vol_of(smile, t, k);
  const double half = widening(draw, smile, t, style, k);
  return in_vol(k, vol, half, std::max(offset, -0.9 * vol / half));
}

FitSlice plain(Draw& draw, double t, const Smile& smile, const Style& style,
               const std::vector<double>& at) {
  FitSlice out{t, {}};
  for (const double k : at)
    out.quotes.push_back(around(draw, smile, t, k, style, style.noise * draw.between(-1, 1)));
  return out;
}

FitSlice plain(Draw& draw, double t, const Smile& smile, const Style& style) {
  return plain(draw, t, smile, style, strikes(draw, smile, style));
}

FitSlice noisy(Draw& draw, double t, const Smile& smile) {
  Style style = some_style(draw);
  style.noise = draw.unit();
  return plain(draw, t, smile, style);
}

FitSlice few(Draw& draw, double t, const Smile& smile) {
  return plain(draw, t, smile, {draw.whole(1, 3), -2, 2, draw.scale(0.01, 0.05), 0.5});
}

FitSlice many(Draw& draw, double t, const Smile& smile, std::size_t count) {
  return plain(draw, t, smile, {count, -6, 5, draw.scale(0.003, 0.03), 0.5});
}

FitSlice ranged(Draw& draw, double t, const Smile& smile, bool wide) {
  Style style = some_style(draw);
  const double reach = wide ? draw.between(5, 8) : draw.between(0.4, 1);
  style.low = -reach;
  style.high = 0.8 * reach;
  return plain(draw, t, smile, style);
}

FitSlice zigzagging(Draw& draw, double t, const Smile& smile) {
  const Style style{draw.whole(20, 40), -2.5, 2.5, draw.between(0.05, 0.2), 0};
  FitSlice out{t, {}};
  double side = draw.sign();
  for (const double k : strikes(draw, smile, style))
    out.quotes.push_back(
        around(draw, smile, t, k, style, (side = -side) * draw.between(0.6, 0.95)));
  return out;
}

FitSlice fully_spread(Draw& draw, double t, const Smile& smile) {
  const Style style{draw.whole(5, 30), -2.5, 2.5, 1, 0};
  FitSlice out{t, {}};
  for (const double k : strikes(draw, smile, style)) {
    const double mid = vol_of(smile, t, k) * draw.scale(0.55, 3);
    out.quotes.push_back(in_vol(k, mid, mid, 0));
  }
  return out;
}

struct Ticks {
  double tick;  // over the forward
  double part;  // of the price, on either side of it, at the least
};
constexpr Ticks kOneTick{kTick, 0};
// A tick of 0.05 on a forward of 5,000, and 1 % of the price.
constexpr Ticks kIndexTicks{0.1 * kTick, 0.005};

// Bid and ask on the ticks about the truth. Without a bid a quote is not used, so it is left out;
// at worst the one at the money stays, a tick wide.
FitSlice ticked(Draw& draw, double t, const Smile& smile, const Ticks& ticks) {
  Style style = some_style(draw);
  style.low = -8;
  style.high = 8;
  style.count *= 2;
  FitSlice out{t, {}};
  for (const double k : strikes(draw, smile, style)) {
    const double price = otm_price(k, std::sqrt(smile(k)));
    const double bid = ticks.tick * std::floor(price * (1 - ticks.part) / ticks.tick);
    const double ask = ticks.tick * std::ceil(price * (1 + ticks.part) / ticks.tick);
    if (bid <= 0) continue;
    if (const auto quote = in_price(k, t, bid, std::max(ask, bid + ticks.tick)))
      out.quotes.push_back(*quote);
  }
  if (out.quotes.empty()) out.quotes.push_back(in_vol(0, vol_of(smile, t, 0), ticks.tick, 0));
  return out;
}

// Half-spreads of price that are a part of the price at the money all along the slice.
FitSlice with_intrinsic_bids(Draw& draw, double t, const Smile& smile) {
  const Style style = some_style(draw);
  const double half = draw.scale(0.02, 0.3) * otm_price(0, deviation(smile));
  FitSlice out{t, {}};
  for (const double k : strikes(draw, smile, style)) {
    const double price = otm_price(k, std::sqrt(smile(k)));
    const double bid = price - half * draw.between(0.5, 1.5);
    const double ask = price + half * draw.between(0.5, 1.5);
    if (const auto quote = in_price(k, t, std::max(bid, 0.0), ask)) out.quotes.push_back(*quote);
  }
  if (out.quotes.empty()) return few(draw, t, smile);
  return out;
}

// --- Offences -----------------------------------------------------------------------------------

void shift(FitQuote& quote, double vol) {
  quote.vol += vol;
  quote.vol_bid = std::max(quote.vol_bid + vol, 0.0);
  quote.vol_ask += vol;
}

// An inner quote in the middle half of the slice.
std::size_t inner(Draw& draw, const FitSlice& slice) {
  const std::size_t n = slice.quotes.size();
  assert(n >= 8);
  return draw.whole(n / 4, n - 1 - n / 4);
}

std::size_t make_stray(Draw& draw, FitSlice& slice) {
  const std::size_t at = inner(draw, slice);
  FitQuote& quote = slice.quotes[at];
  const double move = 20 * quote.half_spread;
  shift(quote, quote.vol > 2 * move ? draw.sign() * move : move);
  return at;
}

std::size_t break_butterfly(Draw& draw, FitSlice& slice) {
  const std::size_t at = inner(draw, slice);
  FitQuote& quote = slice.quotes[at];
  while (!breaks_butterfly(slice, at)) shift(quote, quote.half_spread);
  shift(quote, draw.between(1, 5) * quote.half_spread);
  return at;
}

// Over a third of the strikes, which the two must share, the late ask goes below the early bid.
std::pair<std::size_t, std::size_t> cross(Draw& draw, const FitSlice& early, FitSlice& late) {
  const std::size_t n = late.quotes.size();
  assert(n == early.quotes.size() && n >= 8);
  const std::size_t first = draw.whole(n / 4, n / 3), last = first + n / 3;
  const double part = draw.between(0.9, 0.99);
  for (std::size_t i = first; i < last; ++i) {
    FitQuote& q = late.quotes[i];
    const double ask =
        early.quotes[i].vol_bid * std::sqrt(part * early.year_fraction / late.year_fraction);
    q.half_spread = std::min(q.half_spread, 0.3 * ask);
    q = in_vol(q.k, ask - q.half_spread, q.half_spread, 0);
  }
  return {first, last};
}

// --- Chains -------------------------------------------------------------------------------------

class Maker {
 public:
  Maker(ChainKind kind, std::uint64_t seed)
      // Seeds of different kinds far apart.
      : draw_(seed * 1'000'003 + static_cast<std::uint64_t>(kind)) {
    out_.kind = word(kind);
    out_.seed = seed;
    make(kind);
    std::sort(out_.offenders.begin(), out_.offenders.end(), [](const auto& a, const auto& b) {
      return std::pair{a.slice, a.quote} < std::pair{b.slice, b.quote};
    });
    out_.offenders.erase(std::unique(out_.offenders.begin(), out_.offenders.end()),
                         out_.offenders.end());
    out_.free_surface_exists_inside = out_.offenders.empty();
  }
  AdversarialChain take() { return std::move(out_); }

 private:
  // Every slice quoted by `quote(t, smile)`.
  template <class Quote>
  void quoted(Truth truth, Quote quote) {
    for (std::size_t i = 0; i < truth.times.size(); ++i)
      out_.slices.push_back(quote(truth.times[i], truth.smiles[i]));
    out_.truth = std::move(truth.smiles);
  }
  void quoted_plainly(Truth truth, double half_spread = 0) {
    quoted(std::move(truth), [&](double t, const Smile& smile) {
      Style style = some_style(draw_);
      if (half_spread > 0) style.half_spread = half_spread;
      return plain(draw_, t, smile, style);
    });
  }

  void make(ChainKind kind) {
    switch (kind) {
      case ChainKind::event: return quoted_plainly(announced(draw_), draw_.scale(0.005, 0.03));
      case ChainKind::same_day: return same_day();
      case ChainKind::next_day: return quoted_plainly(ordinary(draw_, close_times(kDay)));
      case ChainKind::crossed_mids: return crossed_mids();
      case ChainKind::few_quotes: return few_quotes();
      case ChainKind::many_strikes: return many_strikes();
      case ChainKind::tick_spreads:
        return each(
            [&](double t, const Smile& smile) { return ticked(draw_, t, smile, kOneTick); });
      case ChainKind::full_spreads:
        return each([&](double t, const Smile& smile) { return fully_spread(draw_, t, smile); });
      case ChainKind::zigzag:
        return each([&](double t, const Smile& smile) { return zigzagging(draw_, t, smile); });
      case ChainKind::broken_butterfly: return broken_butterfly();
      case ChainKind::crossed_calendar: return crossed_calendar();
      case ChainKind::stray: return stray();
      case ChainKind::kinked: return quoted_plainly(piecewise_linear(draw_), 0.01);
      case ChainKind::flat: return quoted_plainly(level(draw_), draw_.scale(0.001, 0.01));
      case ChainKind::steep: return steep();
      case ChainKind::ranges: return ranges();
      case ChainKind::intrinsic_bids:
        return each(
            [&](double t, const Smile& smile) { return with_intrinsic_bids(draw_, t, smile); });
      case ChainKind::noisy:
        return each([&](double t, const Smile& smile) { return noisy(draw_, t, smile); });
      case ChainKind::mixed: return mixed();
    }
  }

  template <class Quote>
  void each(Quote quote) {
    quoted(ordinary(draw_, some_times(draw_, 1, 6)), quote);
  }

  // Ordinary times with one more, `gap` after one of them.
  std::vector<double> close_times(double gap) {
    auto times = some_times(draw_, 1, 5);
    close_ = draw_.whole(0, times.size() - 1);
    times.insert(times.begin() + static_cast<std::ptrdiff_t>(close_) + 1, times[close_] + gap);
    for (std::size_t i = close_ + 2; i < times.size(); ++i) times[i] += gap;
    return times;
  }

  void same_day() {
    auto times = spread_out_times(draw_, draw_.whole(1, 5), draw_.between(1, 8) / (365 * 24));
    auto truth = essvi(draw_, std::move(times), {draw_.between(-0.9, -0.3), 0.05, 0.5, 0.95});
    quoted(std::move(truth),
           [&](double t, const Smile& smile) { return ticked(draw_, t, smile, kIndexTicks); });
  }

  // The early mids go up and the late ones down by 0.9 of half-spreads wide enough for them to
  // pass one another.
  void crossed_mids() {
    const Truth truth = ordinary(draw_, close_times(draw_.between(0.5, 3) * kDay));
    const std::size_t late = close_ + 1;
    const Style style = some_style(draw_);
    const auto at = strikes(draw_, truth.smiles[close_], style);
    const double wider = draw_.between(1.1, 1.4);
    for (std::size_t i = 0; i < truth.times.size(); ++i)
      out_.slices.push_back(i == close_ || i == late
                                ? crossing(truth, at, wider, i == close_ ? 0.9 : -0.9)
                                : plain(draw_, truth.times[i], truth.smiles[i], style));
    out_.truth = truth.smiles;
  }

  FitSlice crossing(const Truth& truth, const std::vector<double>& at, double wider,
                    double offset) {
    const std::size_t i = offset > 0 ? close_ : close_ + 1;
    const double early = std::sqrt(truth.times[close_]), late = std::sqrt(truth.times[close_ + 1]);
    FitSlice out{truth.times[i], {}};
    for (const double k : at) {
      const double s = std::sqrt(truth.smiles[close_](k));
      const double next = std::sqrt(truth.smiles[close_ + 1](k));
      const double half = wider * (next - s) / (0.9 * (early + late));
      out.quotes.push_back(in_vol(k, vol_of(truth.smiles[i], out.year_fraction, k), half, offset));
    }
    return out;
  }

  void few_quotes() {
    const double share = draw_.chance(0.3) ? 1 : draw_.between(0.3, 0.8);
    bool first = true;
    quoted(ordinary(draw_, some_times(draw_, 1, 8)), [&](double t, const Smile& smile) {
      const bool thin = std::exchange(first, false) || draw_.chance(share);
      return thin ? few(draw_, t, smile) : plain(draw_, t, smile, some_style(draw_));
    });
  }

  void many_strikes() {
    auto times = some_times(draw_, 1, 3);
    const std::size_t which = draw_.whole(0, times.size() - 1);
    quoted(ordinary(draw_, std::move(times)), [&](double t, const Smile& smile) {
      return out_.slices.size() == which ? many(draw_, t, smile, 2000)
                                         : plain(draw_, t, smile, some_style(draw_));
    });
  }

  void steep() {
    const double rho = draw_.sign() * draw_.between(0.8, 0.985);
    auto truth = essvi(draw_, some_times(draw_, 1, 6), {rho, 0, 0.97, 0.999});
    quoted_plainly(std::move(truth));
  }

  void ranges() {
    bool wide = draw_.chance(0.5);
    quoted(ordinary(draw_, some_times(draw_, 2, 8)),
           [&](double t, const Smile& smile) { return ranged(draw_, t, smile, wide = !wide); });
  }

  void offend(std::size_t slice, std::size_t quote) { out_.offenders.push_back({slice, quote}); }

  // Clean, and tight enough for an offence to stand out.
  void clean(Truth truth) {
    const double half_spread = draw_.scale(0.002, 0.006);
    quoted(std::move(truth), [&](double t, const Smile& smile) {
      return plain(draw_, t, smile, {draw_.whole(16, 50), -3, 2.5, half_spread, 0.2});
    });
  }

  void stray() {
    clean(ordinary(draw_, some_times(draw_, 1, 6)));
    for (std::size_t i = draw_.whole(1, 2); i > 0; --i) {
      const std::size_t slice = draw_.whole(0, out_.slices.size() - 1);
      const bool again = !out_.offenders.empty() && out_.offenders[0].slice == slice;
      if (!again) offend(slice, make_stray(draw_, out_.slices[slice]));
    }
  }

  void broken_butterfly() {
    clean(ordinary(draw_, some_times(draw_, 1, 6)));
    for (std::size_t i = 0; i < out_.slices.size(); ++i)
      if (i == 0 || draw_.chance(0.3)) offend(i, break_butterfly(draw_, out_.slices[i]));
  }

  void crossed_calendar() {
    // Close together, so that few half-spreads decide which of the two is missed.
    const Truth truth = ordinary(draw_, close_times(draw_.between(0.5, 3) * kDay));
    const std::size_t early = close_;
    const Style style{draw_.whole(16, 40), -3, 2.5, draw_.scale(0.002, 0.01), 0.2};
    const auto at = strikes(draw_, truth.smiles[early], style);
    quoted(truth, [&](double t, const Smile& smile) {
      const std::size_t i = out_.slices.size();
      return i == early || i == early + 1 ? plain(draw_, t, smile, style, at)
                                          : plain(draw_, t, smile, style);
    });
    offend_by_crossing(early);
  }

  void offend_by_crossing(std::size_t early) {
    const auto [first, last] = cross(draw_, out_.slices[early], out_.slices[early + 1]);
    for (std::size_t i = first; i < last; ++i) {
      offend(early, i);
      offend(early + 1, i);
    }
  }

  Truth mixed_truth() {
    switch (draw_.whole(0, 3)) {
      case 0: return announced(draw_);
      case 1: return ordinary(draw_, close_times(kDay));
      case 2: {
        const double first = draw_.between(1, 8) / (365 * 24);
        return ordinary(draw_, spread_out_times(draw_, draw_.whole(2, 12), first));
      }
      default: return ordinary(draw_, some_times(draw_, 2, 12));
    }
  }

  void mixed() {
    quoted(mixed_truth(), [&](double t, const Smile& smile) { return any(t, smile); });
    for (std::size_t i = 0; i < out_.slices.size(); ++i) {
      if (!tight(out_.slices[i]) || !draw_.chance(0.15)) continue;
      offend(i, draw_.chance(0.5) ? make_stray(draw_, out_.slices[i])
                                  : break_butterfly(draw_, out_.slices[i]));
    }
  }

  // Where 20 half-spreads are not beyond all vols.
  static bool tight(const FitSlice& slice) {
    return slice.quotes.size() >= 8 &&
           std::all_of(slice.quotes.begin(), slice.quotes.end(),
                       [](const FitQuote& q) { return q.half_spread < 0.1 * q.vol; });
  }

  FitSlice any(double t, const Smile& smile) {
    switch (draw_.whole(0, 8)) {
      case 0: return few(draw_, t, smile);
      case 1: return many(draw_, t, smile, 300);
      case 2: return ticked(draw_, t, smile, kIndexTicks);
      case 3: return fully_spread(draw_, t, smile);
      case 4: return zigzagging(draw_, t, smile);
      case 5: return ranged(draw_, t, smile, draw_.chance(0.5));
      case 6: return with_intrinsic_bids(draw_, t, smile);
      case 7: return plain(draw_, t, smile, some_style(draw_));
      default: return noisy(draw_, t, smile);
    }
  }

  Draw draw_;
  AdversarialChain out_;
  std::size_t close_ = 0;  // the earlier of two close times
};

}  // namespace

std::string_view word(ChainKind kind) {
  static constexpr std::array<std::string_view, kChainKinds> kWords{"event",
                                                                    "same_day",
                                                                    "next_day",
                                                                    "crossed_mids",
                                                                    "few_quotes",
                                                                    "many_strikes",
                                                                    "tick_spreads",
                                                                    "full_spreads",
                                                                    "zigzag",
                                                                    "broken_butterfly",
                                                                    "crossed_calendar",
                                                                    "stray",
                                                                    "kinked",
                                                                    "flat",
                                                                    "steep",
                                                                    "ranges",
                                                                    "intrinsic_bids",
                                                                    "noisy",
                                                                    "mixed"};
  return kWords[static_cast<std::size_t>(kind)];
}

double call_over_forward(double k, double total_vol) {
  const double otm = otm_price(k, total_vol);
  return k < 0 ? otm - std::expm1(k) : otm;
}

bool breaks_butterfly(const FitSlice& slice, std::size_t at) {
  if (at == 0 || at + 1 >= slice.quotes.size()) return false;
  const double root = std::sqrt(slice.year_fraction);
  const FitQuote &low = slice.quotes[at - 1], &quote = slice.quotes[at],
                 &high = slice.quotes[at + 1];
  const double up = std::exp(high.k) - std::exp(quote.k),
               down = std::exp(quote.k) - std::exp(low.k);
  const double line = (up * call_over_forward(low.k, low.vol_ask * root) +
                       down * call_over_forward(high.k, high.vol_ask * root)) /
                      (up + down);
  return call_over_forward(quote.k, quote.vol_bid * root) > line;
}

AdversarialChain adversarial_chain(ChainKind kind, std::uint64_t seed) {
  return Maker(kind, seed).take();
}

}  // namespace duskgrid::oracle
