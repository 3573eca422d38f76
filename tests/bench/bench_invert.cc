// What an inversion costs, beside a yardstick measured in the same run: one Black evaluation by
// std::erfc and std::log. An invented chain, shuffled so that branches miss as in life.
#include <benchmark/benchmark.h>

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <map>
#include <numbers>
#include <random>
#include <string>

#include "pricing/invert_batch.h"

namespace {

using namespace duskgrid;
using pricing::VolStatus;
using quotes::PutCall;

constexpr const char* kYardstick = "black/std_erfc";
constexpr std::size_t kQuotes = 8192;  // more than the first cache holds, as a night does

struct Chain {
  pricing::ColumnTerms terms{100, 0.98, 0.25};
  std::vector<double> strikes, prices, vols;
  std::vector<PutCall> put_calls;
};

// Three months out, vols of 10 to 50 %, strikes to 30 % from the money, both sides.
const Chain& chain() {
  static const Chain kChain = [] {
    std::mt19937_64 random(20310314);
    std::uniform_real_distribution<double> unit(0, 1);
    Chain c;
    for (std::size_t i = 0; i < kQuotes; ++i) {
      const double strike = c.terms.forward * std::exp(0.6 * (unit(random) - 0.5));
      const auto side = unit(random) < 0.5 ? PutCall::call : PutCall::put;
      const double vol = 0.1 + 0.4 * unit(random);
      c.strikes.push_back(strike);
      c.put_calls.push_back(side);
      c.vols.push_back(vol);
      c.prices.push_back(
          pricing::black_price({side, c.terms.forward, strike, c.terms.discount_factor},
                               vol * std::sqrt(c.terms.year_fraction)));
    }
    return c;
  }();
  return kChain;
}

double plain_call(double forward, double strike, double discount, double s) {
  const double d1 = std::log(forward / strike) / s + 0.5 * s, d2 = d1 - s;
  constexpr double kRootHalf = 0.5 * std::numbers::sqrt2;
  return 0.5 * discount *
         (forward * std::erfc(-d1 * kRootHalf) - strike * std::erfc(-d2 * kRootHalf));
}

void yardstick(benchmark::State& state) {
  const Chain& c = chain();
  const double root_t = std::sqrt(c.terms.year_fraction);
  for (auto _ : state)
    for (std::size_t i = 0; i < kQuotes; ++i)
      benchmark::DoNotOptimize(
          plain_call(c.terms.forward, c.strikes[i], c.terms.discount_factor, c.vols[i] * root_t));
  state.SetItemsProcessed(state.iterations() * static_cast<std::int64_t>(kQuotes));
}

void scalar(benchmark::State& state) {
  const Chain& c = chain();
  for (auto _ : state)
    for (std::size_t i = 0; i < kQuotes; ++i)
      benchmark::DoNotOptimize(pricing::implied_vol(
          {c.put_calls[i], c.terms.forward, c.strikes[i], c.terms.discount_factor}, c.prices[i],
          c.terms.year_fraction));
  state.SetItemsProcessed(state.iterations() * static_cast<std::int64_t>(kQuotes));
}

void batch(benchmark::State& state, const std::string& target) {
  const Chain& c = chain();
  pricing::use_batch_target(target);
  std::vector<double> vols(kQuotes);
  std::vector<VolStatus> statuses(kQuotes);
  for (auto _ : state) {
    pricing::implied_vols(c.terms, {c.strikes, c.put_calls, c.prices}, vols, statuses);
    benchmark::DoNotOptimize(vols.data());
  }
  state.SetItemsProcessed(state.iterations() * static_cast<std::int64_t>(kQuotes));
  pricing::use_batch_target("");
}

// The usual table, and after it nanoseconds an item and their ratio to the yardstick.
class RatioReporter : public benchmark::ConsoleReporter {
 public:
  void ReportRuns(const std::vector<Run>& runs) override {
    ConsoleReporter::ReportRuns(runs);
    for (const auto& run : runs)
      if (run.run_type != Run::RT_Aggregate) {
        const double ns = run.GetAdjustedCPUTime() / static_cast<double>(kQuotes);
        auto& all = ns_[run.run_name.function_name];
        all.push_back(ns);
      }
  }
  void Finalize() override {
    if (ns_.empty()) return;
    const double unit = median(ns_[kYardstick]);
    std::printf("\n%-24s %10s %10s\n", "median of runs", "ns an item", "ratio");
    for (auto& [name, all] : ns_)
      std::printf("%-24s %10.1f %10.2f\n", name.c_str(), median(all), median(all) / unit);
  }

 private:
  static double median(std::vector<double>& all) {
    if (all.empty()) return std::nan("");
    std::nth_element(all.begin(), all.begin() + static_cast<std::ptrdiff_t>(all.size() / 2),
                     all.end());
    return all[all.size() / 2];
  }
  std::map<std::string, std::vector<double>> ns_;
};

bool wants_console(int argc, char** argv) {
  return std::none_of(argv, argv + argc, [](const std::string& a) {
    return a.rfind("--benchmark_format=", 0) == 0 && a != "--benchmark_format=console";
  });
}

}  // namespace

int main(int argc, char** argv) {
  benchmark::RegisterBenchmark(kYardstick, yardstick);
  benchmark::RegisterBenchmark("invert/scalar", scalar);
  for (const auto& target : pricing::batch_targets())
    benchmark::RegisterBenchmark(("invert/" + target).c_str(),
                                 [target](benchmark::State& state) { batch(state, target); });
  const bool console = wants_console(argc, argv);
  benchmark::Initialize(&argc, argv);
  if (benchmark::ReportUnrecognizedArguments(argc, argv)) return 64;
  RatioReporter reporter;
  if (console)
    benchmark::RunSpecifiedBenchmarks(&reporter);
  else
    benchmark::RunSpecifiedBenchmarks();
  benchmark::Shutdown();
  return 0;
}
