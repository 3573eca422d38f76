#include "market/dividends.h"

#include <algorithm>
#include <cmath>
#include <tuple>

#include "market/day_count.h"

namespace duskgrid::market {
namespace {

// The forward and its derivative by borrow.
struct Slope {
  double forward, by_borrow;
};

Slope forward_and_slope(const Financing& f, std::span<const Dividend> dividends) {
  double forward = f.spot, by_borrow = 0, now = 0;
  const auto grow_to = [&](double time) {
    const double growth = std::exp((f.rate - f.borrow) * (time - now));
    by_borrow = growth * (by_borrow - (time - now) * forward);
    forward *= growth;
    now = time;
  };
  for (const Dividend& d : dividends) {
    if (!(d.time > 0 && d.time < f.year_fraction)) continue;
    grow_to(d.time);
    if (d.kind == DividendKind::cash) {
      forward -= d.amount;
    } else {
      forward *= 1 - d.amount;
      by_borrow *= 1 - d.amount;
    }
  }
  grow_to(f.year_fraction);
  return {forward, by_borrow};
}

}  // namespace

std::string_view word(DividendKind kind) {
  return kind == DividendKind::cash ? "cash" : "proportional";
}

std::vector<Dividend> dividends_after(quotes::Instant from, std::span<const DatedDividend> dated) {
  std::vector<Dividend> out;
  for (const DatedDividend& d : dated)
    if (d.ex > from) out.push_back({year_fraction(from, d.ex), d.kind, d.amount});
  std::sort(out.begin(), out.end(), [](const Dividend& a, const Dividend& b) {
    return std::tuple(a.time, a.kind, a.amount) < std::tuple(b.time, b.kind, b.amount);
  });
  return out;
}

std::size_t count_before(std::span<const Dividend> dividends, double year_fraction) {
  return static_cast<std::size_t>(
      std::count_if(dividends.begin(), dividends.end(),
                    [&](const Dividend& d) { return d.time > 0 && d.time < year_fraction; }));
}

double forward_of(const Financing& financing, std::span<const Dividend> dividends) {
  return forward_and_slope(financing, dividends).forward;
}

std::optional<double> borrow_of(double forward, const Financing& financing,
                                std::span<const Dividend> dividends) {
  if (!(forward > 0 && std::isfinite(forward))) return std::nullopt;
  // The forward falls in the borrow wherever it is positive, and its logarithm is nearly linear:
  // Newton's method on that, from the answer without dividends, within a bracket.
  double low = -kMostBorrow, high = kMostBorrow;
  Financing at = financing;
  at.borrow = std::clamp(at.rate - std::log(forward / at.spot) / at.year_fraction, low, high);
  constexpr int kMostSteps = 100;
  for (int step = 0; step < kMostSteps; ++step) {
    const Slope now = forward_and_slope(at, dividends);
    const double miss = now.forward > 0 ? std::log(now.forward / forward) : -1.0;
    (miss > 0 ? low : high) = at.borrow;
    double next = 0.5 * (low + high);
    if (now.forward > 0 && now.by_borrow < 0) {
      const double newton = at.borrow - miss * now.forward / now.by_borrow;
      if (newton > low && newton < high) next = newton;
    }
    constexpr double kSettled = 1e-15;
    const double moved = std::abs(next - at.borrow);
    at.borrow = next;
    if (moved <= kSettled) break;
  }
  constexpr double kMet = 1e-10;  // of the forward: rounding of a few exponentials is 1e-15
  const double reached = forward_of(at, dividends);
  if (!(std::abs(reached - forward) <= kMet * forward)) return std::nullopt;
  return at.borrow;
}

}  // namespace duskgrid::market
