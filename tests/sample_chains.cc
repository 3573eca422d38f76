#include "sample_chains.h"

#include <limits>  // libfccp/csv.h needs it and does not include it

// Its copies of file names into fixed buffers end with NUL, which the compiler cannot see.
#pragma GCC diagnostic push
#pragma GCC diagnostic ignored "-Wstringop-truncation"
#define CSV_IO_NO_THREAD
#include <libfccp/csv.h>
#pragma GCC diagnostic pop

#include <algorithm>
#include <array>
#include <cmath>
#include <map>
#include <random>
#include <string>
#include <utility>

#include "pricing/invert.h"

namespace duskgrid::samples {
namespace {

using quotes::PutCall;
using surface::FitQuote;
using surface::FitSlice;

constexpr double kForward = 5000, kTick = 0.05;

// Deviation of the index at a time.
double deviation(double t) { return std::sqrt(0.025 * t + 0.001 * std::sqrt(t)); }

// Undiscounted. Weights, and means and deviations that spread with time, so that later mixtures are
// spreads of earlier ones: no calendar arbitrage.
double index_price(double t, double strike, PutCall side) {
  const double unit = deviation(t);
  constexpr double kCalm = 0.70, kUneasy = 0.24, kPanic = 0.06;
  const double calm = 1 + 0.30 * unit, uneasy = 1 - 0.45 * unit;
  const double panic = (1 - kCalm * calm - kUneasy * uneasy) / kPanic;
  const auto part = [&](double weight, double mean, double width) {
    return weight * pricing::black_price({side, kForward * mean, strike, 1}, width * unit);
  };
  return part(kCalm, calm, 0.65) + part(kUneasy, uneasy, 1.15) + part(kPanic, panic, 2.2);
}

// An out-of-the-money quote, bid and ask on the ticks; vol is 0 where one side has none. The spread
// is a tick or 2 % of the price, whichever is more.
FitQuote ticked(double t, double k, double noise) {
  const double strike = kForward * std::exp(k);
  const pricing::BlackTerms terms{k < 0 ? PutCall::put : PutCall::call, kForward, strike, 1};
  const double price = index_price(t, strike, terms.put_call);
  const double half = std::max(0.5 * kTick, 0.01 * price);
  const double bid = kTick * std::floor((price + half * (noise - 1)) / kTick);
  const double ask = kTick * std::ceil((price + half * (noise + 1)) / kTick);
  if (bid <= 0) return {k, 0, 0};
  const auto vol = [&](double at) { return pricing::implied_vol(terms, at, t).vol; };
  const double low = vol(bid), high = vol(ask);
  if (!(low > 0 && high > low)) return {k, 0, 0};
  return {k, vol(0.5 * (bid + ask)), 0.5 * (high - low), low, high};
}

// `count` quotes evenly spaced over the strikes that have a bid.
FitSlice index_slice(std::mt19937_64& random, double t, int count) {
  std::uniform_real_distribution<double> noise(-0.5, 0.5);
  const double unit = deviation(t);
  const auto reach = [&](double step) {
    double k = 0;
    while (std::abs(k) < 8 * unit && ticked(t, k + step, -0.5).vol > 0) k += step;
    return k;
  };
  const double low = reach(-0.02 * unit), high = reach(0.02 * unit);
  FitSlice out{t, {}};
  for (int i = 0; i < count; ++i) {
    const FitQuote quote = ticked(t, std::lerp(low, high, i / (count - 1.0)), noise(random));
    if (quote.vol > 0) out.quotes.push_back(quote);
  }
  return out;
}

}  // namespace

Chain index_chain(int slices, int quotes) {
  std::mt19937_64 random(20310314);
  Chain out;
  for (int i = 0; i < slices; ++i) {
    // From a fortnight evenly in the logarithm to two years; one slice is at three months.
    const double part = slices > 1 ? i / (slices - 1.0) : 0.5;
    const double t = slices > 1 ? 0.04 * std::pow(50.0, part) : 0.25;
    out.push_back(index_slice(random, t, quotes));
  }
  return out;
}

namespace {

using Key = std::pair<std::string, std::string>;  // underlying and expiry, as written

struct Expiry {
  double year_fraction, forward;
};

// Rows of six cells named by `columns`, each given to `take`.
template <class Take>
void read_six(const std::filesystem::path& path, const std::array<const char*, 6>& columns,
              Take take) {
  using Reader = io::CSVReader<6, io::trim_chars<' '>, io::double_quote_escape<',', '"'>>;
  Reader reader(path.string());
  reader.read_header(io::ignore_extra_column, columns[0], columns[1], columns[2], columns[3],
                     columns[4], columns[5]);
  std::array<std::string, 6> cells;
  while (reader.read_row(cells[0], cells[1], cells[2], cells[3], cells[4], cells[5])) take(cells);
}

double number(const std::string& cell) {
  return cell.empty() ? std::numeric_limits<double>::quiet_NaN() : std::stod(cell);
}

std::map<Key, Expiry> forwards_of(const std::filesystem::path& folder) {
  std::map<Key, Expiry> out;
  read_six(folder / "forwards.csv",
           {"underlying", "expiry", "year_fraction", "forward", "discount_factor", "source"},
           [&](const auto& c) {
             out[{c[0], c[1]}] = {number(c[2]), number(c[3])};
           });
  return out;
}

}  // namespace

Chain published_chain(const std::filesystem::path& folder) {
  const auto forwards = forwards_of(folder);
  std::map<std::string, std::map<double, std::vector<FitQuote>>> chains;
  read_six(folder / "ledger.csv", {"underlying", "expiry", "strike", "state", "vol_bid", "vol_ask"},
           [&](const auto& c) {
             const auto at = forwards.find({c[0], c[1]});
             if (c[3] != "used" || at == forwards.end()) return;
             const double low = number(c[4]), high = number(c[5]);
             if (!(high > low)) return;
             const double k = -pricing::log_moneyness_of_forward(at->second.forward, number(c[2]));
             chains[c[0]][at->second.year_fraction].push_back(
                 {k, 0.5 * (low + high), 0.5 * (high - low), low, high});
           });
  Chain best;
  std::size_t most = 0;
  for (auto& [name, slices] : chains) {
    std::size_t count = 0;
    for (const auto& [t, quotes] : slices) count += quotes.size();
    if (count <= most) continue;
    most = count;
    best.clear();
    for (auto& [t, quotes] : slices) {
      std::sort(quotes.begin(), quotes.end(),
                [](const FitQuote& a, const FitQuote& b) { return a.k < b.k; });
      best.push_back({t, quotes});
    }
  }
  return best;
}

}  // namespace duskgrid::samples
