// What inverting American prices costs on one core, on an invented night: 60 underlyings of 12
// expiries from a week to three years, 40 to 100 quotes an expiry, a third of the underlyings
// without yield, skewed volatilities, quotes with some time value. Each quote is one price;
// `three_prices` has a bid, a mid and an ask of each, which share the tables of their expiry.
// Tables begin anew in every call. Counters: inversions a second that found a volatility, tables
// (boundaries of eight volatilities) an expiry, and the share that went to the reference engine.
#include <benchmark/benchmark.h>

#include <algorithm>
#include <cmath>
#include <random>
#include <string>
#include <vector>

#include "pricing/american_batch.h"

namespace {

using namespace duskgrid;
using namespace pricing;
using quotes::PutCall;

struct Expiry {
  AmericanColumnTerms terms;
  std::vector<double> strikes, prices, vols;
  std::vector<PutCall> put_calls;
};

double smile(double level, double skew, double log_moneyness, double t) {
  const double k = log_moneyness / std::sqrt(t);
  return std::max(0.05, level - skew * k + 0.1 * k * k / (1 + std::abs(k)));
}

// Prices come from an engine of modest accuracy, as rounding to a cent would make them anyway.
Expiry expiry_of(std::mt19937_64& random, const AmericanEngine& engine, double spot, double rate,
                 double yield, double level, double t) {
  std::uniform_real_distribution<double> unit(0, 1);
  Expiry e;
  e.terms = {spot, rate, yield, t};
  const double forward = spot * std::exp((rate - yield) * t);
  const int count = 40 + static_cast<int>(61 * unit(random));
  const double reach = level * std::sqrt(t) * 2.5;
  while (static_cast<int>(e.strikes.size()) < count) {
    const double strike = forward * std::exp(reach * (2 * unit(random) - 1.2));
    const double vol = smile(level, 0.05, std::log(strike / forward), t);
    const auto side = (strike < spot) == (unit(random) < 0.7) ? PutCall::put : PutCall::call;
    const auto p = engine.price({side, spot, strike, rate, yield, t}, vol);
    if (p.status != AmericanStatus::ok || p.immediate || p.price < 1e-4 * spot) continue;
    // An in-the-money quote without time value is no question to ask.
    if (p.price < 1.0001 * std::max(0.0, side == PutCall::put ? strike - spot : spot - strike))
      continue;
    e.strikes.push_back(strike);
    e.put_calls.push_back(side);
    e.vols.push_back(vol);
    e.prices.push_back(p.price);
  }
  return e;
}

std::vector<Expiry> make_night() {
  std::mt19937_64 random(20310314);
  std::uniform_real_distribution<double> unit(0, 1);
  const AmericanEngine engine({10, 16, 41, 40});
  const double times[] = {7, 14, 21, 35, 63, 98, 154, 217, 280, 399, 700, 1100};
  std::vector<Expiry> night;
  for (int u = 0; u < 60; ++u) {
    const double spot = std::exp(3 + 3 * unit(random)), rate = 0.005 + 0.05 * unit(random);
    const double yield = u % 3 == 0 ? 0.0 : 0.04 * unit(random), level = 0.15 + 0.4 * unit(random);
    for (const double days : times)
      night.push_back(expiry_of(random, engine, spot, rate, yield, level, days / 365));
  }
  return night;
}

const std::vector<Expiry>& night() {
  static const std::vector<Expiry> kNight = make_night();
  return kNight;
}

// Every quote at its price, and a bid and an ask half a per cent to either side when three.
Expiry repeated(const Expiry& e, int times) {
  Expiry out = e;
  for (int i = 1; i < times; ++i)
    for (std::size_t j = 0; j < e.strikes.size(); ++j) {
      out.strikes.push_back(e.strikes[j]);
      out.put_calls.push_back(e.put_calls[j]);
      out.prices.push_back(e.prices[j] * (i == 1 ? 1.005 : 1.01));
    }
  return out;
}

void invert(benchmark::State& state, int times) {
  std::vector<Expiry> all;
  for (const auto& e : night()) all.push_back(repeated(e, times));
  const AmericanInverter inverter;
  std::vector<double> vols(512), european(512);
  std::vector<AmericanVolStatus> statuses(512);
  std::size_t panels = 0, polished = 0, quotes = 0, found = 0, expiries = 0;
  for (auto _ : state)
    for (const auto& e : all) {
      const std::size_t n = e.prices.size();
      const AmericanVolColumns out{std::span(vols).first(n), std::span(european).first(n),
                                   std::span(statuses).first(n)};
      const auto counts = inverter.invert(e.terms, {e.strikes, e.put_calls, e.prices}, out);
      panels += counts.panels;
      polished += counts.polished;
      quotes += n;
      ++expiries;
      found += static_cast<std::size_t>(
          std::count(out.statuses.begin(), out.statuses.end(), AmericanVolStatus::ok));
    }
  state.counters["inversions"] =
      benchmark::Counter(static_cast<double>(found), benchmark::Counter::kIsRate);
  state.counters["tables_an_expiry"] = static_cast<double>(panels) / static_cast<double>(expiries);
  state.counters["polished_share"] = static_cast<double>(polished) / static_cast<double>(quotes);
  state.counters["found_share"] = static_cast<double>(found) / static_cast<double>(quotes);
}

void table(benchmark::State& state) {
  const PanelMaker maker;
  for (auto _ : state) benchmark::DoNotOptimize(maker.make(0.03, 0.01, 0.1, 0.3));
}

void reference(benchmark::State& state) {
  const AmericanEngine engine;
  for (auto _ : state)
    benchmark::DoNotOptimize(engine.price({PutCall::put, 100, 105, 0.05, 0.02, 0.5}, 0.25));
}

}  // namespace

int main(int argc, char** argv) {
  benchmark::Initialize(&argc, argv);
  if (benchmark::ReportUnrecognizedArguments(argc, argv)) return 64;
  for (const auto& target : batch_targets())
    for (const int times : {1, 3}) {
      const std::string name = times == 1 ? "invert/one_price/" : "invert/three_prices/";
      benchmark::RegisterBenchmark((name + target).c_str(), [target,
                                                             times](benchmark::State& state) {
        use_batch_target(target);
        invert(state, times);
        use_batch_target("");
      })->Unit(benchmark::kMillisecond);
    }
  benchmark::RegisterBenchmark("one_table", table)->Unit(benchmark::kMicrosecond);
  benchmark::RegisterBenchmark("one_reference_price", reference)->Unit(benchmark::kMicrosecond);
  benchmark::RunSpecifiedBenchmarks();
  benchmark::Shutdown();
  return 0;
}
