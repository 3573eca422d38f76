// What inverting American prices costs on one core, on an invented night: 60 underlyings of 12
// expiries from a week to three years, 40 to 100 quotes an expiry, a third of the underlyings
// without yield, skewed volatilities, quotes with some time value. Each quote is one price;
// `three_prices` has a bid, a mid and an ask of each, which share the tables of their expiry.
// `paying` is a night of 20 underlyings with four cash dividends a year, 0.2 to 1.5 % of the spot
// each, and a third with borrow; expiries before the first dividend have none.
// Tables begin anew in every call. Counters: inversions a second that found a volatility, tables
// (boundaries of eight volatilities) an expiry, and the share that went to the reference engine.
#include <benchmark/benchmark.h>

#include <algorithm>
#include <cmath>
#include <random>
#include <string>
#include <vector>

#include "pricing/american_dividend_batch.h"

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

struct PayingExpiry {
  Expiry expiry;
  std::vector<Dividend> dividends;
};

// Prices by coarse finite differences, as rounding to a cent would make them anyway.
PayingExpiry paying_expiry(std::mt19937_64& random, double spot, double rate, double borrow,
                           double level, double share, double first, double t) {
  std::uniform_real_distribution<double> unit(0, 1);
  PayingExpiry out;
  auto& e = out.expiry;
  e.terms = {spot, rate, borrow, t};
  for (double at = first; at < t; at += 0.25)
    out.dividends.push_back({at, DividendKind::cash, share * spot});
  const double forward = market::forward_of({spot, rate, borrow, t}, out.dividends);
  const int count = 30 + static_cast<int>(71 * unit(random));
  const DividendOptions rough{Shortfall::liquidator, Style::american, 100, 20};
  while (static_cast<int>(e.strikes.size()) < count) {
    const double strike = forward * std::exp(level * std::sqrt(t) * 2.5 * (2 * unit(random) - 1.2));
    const double vol = smile(level, 0.05, std::log(strike / forward), t);
    const auto side = (strike < spot) == (unit(random) < 0.7) ? PutCall::put : PutCall::call;
    const auto p =
        price_with_dividends({side, spot, strike, rate, borrow, t}, vol, out.dividends, rough);
    const double intrinsic = std::max(0.0, side == PutCall::put ? strike - spot : spot - strike);
    if (p.status != AmericanStatus::ok || p.price < intrinsic + 1e-3 * spot) continue;
    e.strikes.push_back(strike);
    e.put_calls.push_back(side);
    e.vols.push_back(vol);
    e.prices.push_back(p.price);
  }
  return out;
}

const std::vector<PayingExpiry>& paying_night() {
  static const std::vector<PayingExpiry> kNight = [] {
    std::mt19937_64 random(20310314);
    std::uniform_real_distribution<double> unit(0, 1);
    const double times[] = {7, 14, 21, 35, 63, 98, 154, 217, 280, 399, 560, 730};
    std::vector<PayingExpiry> night;
    for (int u = 0; u < 20; ++u) {
      const double spot = std::exp(3 + 3 * unit(random)), rate = 0.005 + 0.05 * unit(random);
      const double borrow = u % 3 == 0 ? 0.03 * unit(random) : 0, level = 0.15 + 0.4 * unit(random);
      const double share = 0.002 + 0.013 * unit(random), first = 0.25 * unit(random);
      for (const double days : times)
        night.push_back(paying_expiry(random, spot, rate, borrow, level, share, first, days / 365));
    }
    return night;
  }();
  return kNight;
}

void invert_paying(benchmark::State& state) {
  std::vector<PayingExpiry> all;
  for (const auto& e : paying_night()) all.push_back({repeated(e.expiry, 3), e.dividends});
  const DividendInverter inverter;
  std::vector<double> vols(512), european(512);
  std::vector<AmericanVolStatus> statuses(512);
  std::size_t panels = 0, quotes = 0, found = 0, expiries = 0;
  for (auto _ : state)
    for (const auto& [e, dividends] : all) {
      const std::size_t n = e.prices.size();
      const AmericanVolColumns out{std::span(vols).first(n), std::span(european).first(n),
                                   std::span(statuses).first(n)};
      panels +=
          inverter.invert({e.terms, dividends}, {e.strikes, e.put_calls, e.prices}, out).panels;
      quotes += n;
      ++expiries;
      found += static_cast<std::size_t>(
          std::count(out.statuses.begin(), out.statuses.end(), AmericanVolStatus::ok));
    }
  using benchmark::Counter;
  state.counters["inversions"] = Counter(static_cast<double>(found), Counter::kIsRate);
  state.counters["seconds_an_expiry"] =
      Counter(static_cast<double>(expiries), Counter::kIsRate | Counter::kInvert);
  state.counters["tables_an_expiry"] = static_cast<double>(panels) / static_cast<double>(expiries);
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
  for (const auto& target : batch_targets())
    benchmark::RegisterBenchmark(("invert/paying/" + target).c_str(), [target](
                                                                          benchmark::State& state) {
      use_batch_target(target);
      invert_paying(state);
      use_batch_target("");
    })->Unit(benchmark::kMillisecond);
  benchmark::RegisterBenchmark("one_table", table)->Unit(benchmark::kMicrosecond);
  benchmark::RegisterBenchmark("one_reference_price", reference)->Unit(benchmark::kMicrosecond);
  benchmark::RunSpecifiedBenchmarks();
  benchmark::Shutdown();
  return 0;
}
