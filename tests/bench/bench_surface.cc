// What a surface costs: the backbone alone, the whole fit, its certificate, and both together. On
// invented index chains with tick spreads, and on the used quotes of a published run when
// DUSKGRID_BENCH_CHAIN names its folder (docs/formats.md, ledger.csv and forwards.csv).
#include <benchmark/benchmark.h>

#include <cstdlib>
#include <exception>
#include <iostream>
#include <string>
#include <utility>

#include "fitted_surface.h"
#include "sample_chains.h"

namespace {

using namespace duskgrid;
using samples::Chain;

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
    const Chain chain = samples::published_chain(folder);
    if (!chain.empty()) return add("published", chain), true;
    std::cerr << "bench_surface: no used quotes in " << folder << '\n';
  } catch (const std::exception& e) {
    std::cerr << "bench_surface: " << folder << ": " << e.what() << '\n';
  }
  return false;
}

}  // namespace

int main(int argc, char** argv) {
  add("1_slice_of_150", samples::index_chain(1, 150));
  for (const int slices : {2, 12, 40})
    add(std::to_string(slices) + "_slices_of_60", samples::index_chain(slices, 60));
  if (!add_published()) return 66;
  benchmark::Initialize(&argc, argv);
  if (benchmark::ReportUnrecognizedArguments(argc, argv)) return 64;
  benchmark::RunSpecifiedBenchmarks();
  benchmark::Shutdown();
  return 0;
}
