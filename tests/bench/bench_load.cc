// What reading quote files costs, beside a bare fast-cpp-csv-parser loop over the same columns of
// the same file: numbers read as double, texts left as they are, nothing kept.
#include <benchmark/benchmark.h>
#include <fmt/format.h>
#include <tbb/global_control.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <limits>  // libfccp/csv.h needs it and does not include it

#pragma GCC diagnostic push
#pragma GCC diagnostic ignored "-Wstringop-truncation"
#define CSV_IO_NO_THREAD
#include <libfccp/csv.h>
#pragma GCC diagnostic pop

#include "quotes/load.h"

namespace duskgrid::bench {
namespace {

constexpr int kRows = 300'000;

// A file of invented quotes by name, expiry and strike, gone with its owner.
class QuoteFile {
 public:
  QuoteFile()
      : path_(std::filesystem::temp_directory_path() /
              fmt::format("duskgrid-bench-load-{}.csv", ::getpid())) {
    std::ofstream file(path_, std::ios::binary);
    file << "underlying,expiry,strike,put_call,bid,ask,bid_size,ask_size,volume,open_interest,"
            "quote_time,underlying_price,exercise,multiplier\n";
    for (int row = 0; row < kRows; ++row) {
      const int name = row / 240, month = row / 24 % 10, step = row / 2 % 12;
      const int bid = row % 2003 * 7919 % 2000 + 5, second = row * 31 % 60;
      file << fmt::format(
          "XB{:04},2031-{:02}-20,{}.50,{},{}.{:02},{}.{:02},{},{},{},{},2031-03-14T15:{:02}:{:02},"
          "{}.37,American,100\n",
          name, month + 3, 80 + 5 * step, row % 2 == 0 ? 'C' : 'P', bid / 100, bid % 100,
          (bid + 15) / 100, (bid + 15) % 100, row % 60, row % 70 + 1, row * 13 % 900,
          row * 17 % 5000, row * 11 % 20 + 39, second, 90 + name % 50);
    }
  }
  ~QuoteFile() { std::filesystem::remove(path_); }
  QuoteFile(const QuoteFile&) = delete;
  QuoteFile& operator=(const QuoteFile&) = delete;
  std::string path() const { return path_.string(); }

 private:
  std::filesystem::path path_;
};

std::string path() {
  static const QuoteFile file;
  return file.path();
}

void report(benchmark::State& state) {
  state.SetItemsProcessed(state.iterations() * kRows);
  state.SetBytesProcessed(state.iterations() *
                          static_cast<std::int64_t>(std::filesystem::file_size(path())));
}

void bare_loop(benchmark::State& state) {
  for (auto _ : state) {
    io::CSVReader<14, io::trim_chars<' ', '\t'>, io::double_quote_escape<',', '"'>> reader(path());
    reader.read_header(io::ignore_no_column, "underlying", "expiry", "strike", "put_call", "bid",
                       "ask", "bid_size", "ask_size", "volume", "open_interest", "quote_time",
                       "underlying_price", "exercise", "multiplier");
    char *underlying = nullptr, *expiry, *put_call, *time, *exercise;
    double strike = 0, bid = 0, ask = 0, bid_size, ask_size, volume, interest, spot, multiplier;
    while (reader.read_row(underlying, expiry, strike, put_call, bid, ask, bid_size, ask_size,
                           volume, interest, time, spot, exercise, multiplier)) {
      benchmark::DoNotOptimize(bid + ask + strike);
      benchmark::DoNotOptimize(*underlying);
    }
  }
  report(state);
}
BENCHMARK(bare_loop)->Name("load/bare_loop")->UseRealTime()->Unit(benchmark::kMillisecond);

void load(benchmark::State& state) {
  const tbb::global_control limit(tbb::global_control::max_allowed_parallelism,
                                  static_cast<std::size_t>(state.range(0)));
  quotes::SourceOptions source;
  source.files = {path()};
  quotes::TimeRules rules;
  for (auto _ : state) {
    const auto loaded = quotes::load_quotes({source}, rules);
    if (!loaded || loaded->table.quotes.size() != kRows) state.SkipWithError("not loaded");
    benchmark::DoNotOptimize(loaded->table.quotes.data());
  }
  report(state);
}
BENCHMARK(load)->Name("load/threads")->Arg(1)->Arg(2)->UseRealTime()->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace duskgrid::bench

BENCHMARK_MAIN();
