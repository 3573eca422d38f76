// What a surface costs: the backbone alone, the whole fit, its certificate, and both together. On
// invented index chains with tick spreads, and on the used quotes of a published run when
// DUSKGRID_BENCH_CHAIN names its folder (docs/formats.md, ledger.csv and forwards.csv).
#include <benchmark/benchmark.h>

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
#include <cstdlib>
#include <exception>
#include <filesystem>
#include <iostream>
#include <map>
#include <random>
#include <string>
#include <utility>
#include <vector>

#include "fitted_surface.h"
#include "pricing/invert.h"

namespace {

using namespace duskgrid;
using quotes::PutCall;
using surface::FitQuote;
using surface::FitSlice;
using Chain = std::vector<FitSlice>;

// --- Invented chains ----------------------------------------------------------------------------

constexpr double kForward = 5000, kTick = 0.05;

// Total variance of an index about a fortnight to two years out: skew that flattens with time.
double index_variance(double t, double k) {
  const double theta = 0.025 * t + 0.001 * std::sqrt(t);
  return surface::smile_at({theta, -0.72, 1.1 * std::sqrt(theta) / (1 + 0.3 * std::sqrt(t))}, k).w;
}

// An out-of-the-money quote, bid and ask on the ticks; vol is 0 where one side has none. The spread
// is a tick or 2 % of the price, whichever is more.
FitQuote ticked(double t, double k, double noise) {
  const double strike = kForward * std::exp(k);
  const pricing::BlackTerms terms{k < 0 ? PutCall::put : PutCall::call, kForward, strike, 1};
  const double price = pricing::black_price(terms, std::sqrt(index_variance(t, k)));
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
  const double unit = std::sqrt(index_variance(t, 0));
  const auto reach = [&](double step) {
    double k = 0;
    while (std::abs(k) < 6 * unit && ticked(t, k + step, -0.5).vol > 0) k += step;
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

// --- A published run ----------------------------------------------------------------------------

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

// The underlying with the most used quotes. The ledger has no mid volatility; the middle of the
// two sides stands for it, which moves no spread.
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

// --- What is measured ---------------------------------------------------------------------------

void count(benchmark::State& state, const Chain& chain) {
  double quotes = 0;
  for (const auto& slice : chain) quotes += static_cast<double>(slice.quotes.size());
  const auto slices = static_cast<double>(chain.size());
  state.counters["quotes"] = quotes;
  state.counters["slices"] = slices;
  // Seconds a slice.
  state.counters["per_slice"] = benchmark::Counter(
      slices, benchmark::Counter::kIsIterationInvariantRate | benchmark::Counter::kInvert);
}

void backbone(benchmark::State& state, const Chain& chain) {
  for (auto _ : state) benchmark::DoNotOptimize(surface::fit_backbone(chain, {}));
  count(state, chain);
}

void whole_fit(benchmark::State& state, const Chain& chain) {
  for (auto _ : state) benchmark::DoNotOptimize(fitted::fit(chain));
  count(state, chain);
}

void certificate(benchmark::State& state, const Chain& chain) {
  const auto fit = fitted::fit(chain);
  if (!fit) return state.SkipWithError(fit.failure().text().c_str());
  const auto surface = fitted::surface_of(chain, *fit);
  bool certified = false;
  for (auto _ : state) benchmark::DoNotOptimize(certified = fitted::certified(surface));
  count(state, chain);
  state.counters["certified"] = certified ? 1 : 0;
}

void fit_and_certificate(benchmark::State& state, const Chain& chain) {
  for (auto _ : state) {
    const auto fit = fitted::fit(chain);
    if (!fit) return state.SkipWithError(fit.failure().text().c_str());
    benchmark::DoNotOptimize(fitted::certified(fitted::surface_of(chain, *fit)));
  }
  count(state, chain);
}

void add(const std::string& name, const Chain& chain) {
  using Measure = void (*)(benchmark::State&, const Chain&);
  const std::pair<const char*, Measure> all[] = {{"backbone", backbone},
                                                 {"fit", whole_fit},
                                                 {"certificate", certificate},
                                                 {"fit_and_certificate", fit_and_certificate}};
  for (const auto& [what, measure] : all)
    benchmark::RegisterBenchmark(
        (std::string(what) + "/" + name).c_str(),
        [measure = measure, chain](benchmark::State& state) { measure(state, chain); })
        ->Unit(benchmark::kMillisecond);
}

// False, with a word on why, when there is a folder but no chain in it.
bool add_published() {
  const char* folder = std::getenv("DUSKGRID_BENCH_CHAIN");
  if (!folder) return true;
  try {
    const Chain chain = published_chain(folder);
    if (!chain.empty()) return add("published", chain), true;
    std::cerr << "bench_surface: no used quotes in " << folder << '\n';
  } catch (const std::exception& e) {
    std::cerr << "bench_surface: " << folder << ": " << e.what() << '\n';
  }
  return false;
}

}  // namespace

int main(int argc, char** argv) {
  add("1_slice_of_150", index_chain(1, 150));
  for (const int slices : {2, 12, 40})
    add(std::to_string(slices) + "_slices_of_60", index_chain(slices, 60));
  if (!add_published()) return 66;
  benchmark::Initialize(&argc, argv);
  if (benchmark::ReportUnrecognizedArguments(argc, argv)) return 64;
  benchmark::RunSpecifiedBenchmarks();
  benchmark::Shutdown();
  return 0;
}
