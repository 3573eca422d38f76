// Hostile quote files: seed texts mutated at random must give a failure that says
// something, or a table whose counts add up. The number of runs is set by
// DUSKGRID_FUZZ_RUNS (a quarter of it for noise, which finds less); each run's seed is its number,
// printed when it fails.
#include <gtest/gtest.h>
#include <unistd.h>

#include <algorithm>
#include <boost/iostreams/device/back_inserter.hpp>
#include <boost/iostreams/filter/gzip.hpp>
#include <boost/iostreams/filter/zstd.hpp>
#include <boost/iostreams/filtering_stream.hpp>
#include <cmath>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <random>
#include <string>
#include <vector>

#include "quotes/load.h"

namespace duskgrid::quotes {
namespace {

constexpr int kDefaultRuns = 2000;

int runs() {
  const char* text = std::getenv("DUSKGRID_FUZZ_RUNS");
  const int stated = text == nullptr ? 0 : std::atoi(text);
  return stated > 0 ? stated : kDefaultRuns;
}

template <class Compressor>
std::string compressed(const std::string& text) {
  std::string packed;
  boost::iostreams::filtering_ostream out;
  out.push(Compressor());
  out.push(boost::iostreams::back_inserter(packed));
  out << text;
  out.reset();
  return packed;
}

std::vector<std::string> seed_texts() {
  std::vector<std::string> texts = {
      "underlying,expiry,strike,put_call,bid,ask,bid_size,quote_time\n"
      "HALYRD,2031-06-20,95,P,1.5,1.7,10,2031-03-14 15:59:00\n"
      "HALYRD,20310620,\"1,095.5\",call,,1.7,-,\n"
      "KELPWK,1939896000,1e2,C,0.05,NA,3,2031-03-14T15:59Z\n",
      "underlying;expiry;strike;call_bid;call_ask;put_bid;put_ask\r\n"
      "HALYRD;2031-06-20;100;5;5.2;4;4.3\r\nHALYRD;2031-06-20;105;3;3.2;6;6.3\r\n",
      "osi_symbol\tbid\task\tremark\n"
      "HALYRD310620P00095500\t1\t2\t\"two\nlines\"\nKELP1 310620C00100000\t1\t2\t\n",
      "\xEF\xBB\xBFunderlying,expiry,settlement,strike,put_call,bid_vol,ask_vol,exercise\n"
      "HALYRD,2031-06-20,AM,95,0,0.2,0.21,A\nHALYRD,2031-06-20,pm,96,1,0.2,0.21,european\n",
      "underlying,expiry,strike,put_call,price\nHALYRD,2031-06-20,95,C,2\n",
  };
  const std::size_t plain = texts.size();
  for (std::size_t i = 0; i < plain; ++i) {
    texts.push_back(compressed<boost::iostreams::gzip_compressor>(texts[i]));
    texts.push_back(compressed<boost::iostreams::zstd_compressor>(texts[i]));
  }
  return texts;
}

// What readers stumble over, put in whole.
const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels = {"\"",
                                                    "\"\"",
                                                    "\n",
                                                    "\r",
                                                    "\r\n",
                                                    ",",
                                                    ";",
                                                    "\t",
                                                    std::string(1, '\0'),
                                                    "nan",
                                                    "inf",
                                                    "1e999",
                                                    "-1e999",
                                                    "0x1p3",
                                                    "1e-400",
                                                    "\xFF\xFE",
                                                    "\xEF\xBB\xBF",
                                                    "\xC3",
                                                    "99999999999",
                                                    "2031-02-30",
                                                    "underlying,",
                                                    "bid,",
                                                    "=1+1",
                                                    std::string(300, '9'),
                                                    std::string(200, ','),
                                                    "HALYRD,2031-06-20,95,P,1.5,1.7,10,\n"};
  return kMorsels;
}

class Mutator {
 public:
  explicit Mutator(unsigned seed) : random_(seed) {}

  std::size_t below(std::size_t bound) {
    return std::uniform_int_distribution<std::size_t>(0, bound - 1)(random_);
  }

  std::string mutate(std::string text) {
    for (std::size_t left = below(6); left > 0; --left) change(text);
    return text;
  }

  std::string noise() {
    std::string bytes(below(400), '\0');
    for (char& c : bytes) c = static_cast<char>(below(256));
    return bytes;
  }

 private:
  void change(std::string& text) {
    const std::size_t at = below(text.size() + 1);
    const std::size_t length = below(text.size() - at + 1);
    switch (below(6)) {
      case 0: text.insert(at, morsels()[below(morsels().size())]); break;
      case 1: text.erase(at, std::min<std::size_t>(length, 1 + below(30))); break;
      case 2: text.insert(at, text.substr(at, length)); break;
      case 3: text.resize(at); break;
      case 4:
        if (at < text.size()) text[at] = static_cast<char>(below(256));
        break;
      default:
        if (at < text.size()) text[at] = static_cast<char>(text[at] ^ (1 << below(8)));
    }
  }

  std::mt19937 random_;
};

bool finite_or_absent(double value) { return std::isnan(value) || std::isfinite(value); }

// A readable contract has all that makes it one, an unreadable one says why.
void check_quote(const QuoteTable& table, const Quote& q) {
  ASSERT_GE(q.file, 0);
  ASSERT_LT(q.file, static_cast<std::int32_t>(table.files.size()));
  EXPECT_GE(q.line, 2);
  ASSERT_LT(q.note, static_cast<std::int32_t>(table.notes.size()));
  for (const double value : {q.strike, q.bid, q.ask, q.bid_size, q.ask_size, q.volume,
                             q.open_interest, q.underlying_price, q.multiplier}) {
    EXPECT_TRUE(finite_or_absent(value));
  }
  if (q.reason == Reason::unreadable) {
    EXPECT_GE(q.note, 0);
    EXPECT_EQ(q.underlying, -1);
    EXPECT_TRUE(std::isnan(q.strike));
  } else {
    EXPECT_EQ(q.reason, Reason::none);
    ASSERT_GE(q.underlying, 0);
    ASSERT_LT(q.underlying, static_cast<std::int32_t>(table.underlyings.size()));
    EXPECT_GT(q.strike, 0);
    EXPECT_NE(q.expiry, kNoInstant);
  }
}

void check_loaded(const LoadedQuotes& loaded) {
  ASSERT_EQ(loaded.files.size(), loaded.table.files.size());
  std::vector<std::int64_t> read(loaded.files.size()), unreadable(loaded.files.size());
  for (const Quote& q : loaded.table.quotes) {
    check_quote(loaded.table, q);
    if (testing::Test::HasFatalFailure()) return;
    ++read[static_cast<std::size_t>(q.file)];
    unreadable[static_cast<std::size_t>(q.file)] += q.reason == Reason::unreadable;
  }
  for (std::size_t i = 0; i < loaded.files.size(); ++i) {
    const FileSummary& file = loaded.files[i];
    const int each = file.columns.layout == Layout::call_put_per_row ? 2 : 1;
    EXPECT_EQ(file.contracts, each * file.rows);
    EXPECT_EQ(file.contracts, read[i]);
    EXPECT_EQ(file.unreadable, unreadable[i]);
  }
}

class FuzzLoad : public testing::Test {
 protected:
  FuzzLoad() : path_(testing::TempDir() + "fuzz_load_" + std::to_string(::getpid())) {}
  ~FuzzLoad() override { std::filesystem::remove(path_); }

  // True when the bytes loaded; checks what came of them either way.
  bool try_bytes(const std::string& bytes) {
    std::ofstream(path_, std::ios::binary) << bytes;
    SourceOptions options;
    options.files = {path_};
    options.half_spread_relative = 0.02;
    TimeRules rules;
    rules.settlement_times = {{"am", std::chrono::hours{9}}, {"pm", std::chrono::hours{16}}};
    const auto loaded = load_quotes({options}, rules);
    if (loaded) {
      check_loaded(*loaded);
    } else {
      EXPECT_EQ(loaded.failure().fault, Fault::not_quotes) << loaded.failure().text();
      EXPECT_NE(loaded.failure().where.find(path_), std::string::npos);
      EXPECT_FALSE(loaded.failure().detail.empty());
    }
    return loaded.ok();
  }

  std::string path_;
};

TEST_F(FuzzLoad, MutatedFilesGiveAFailureOrATableThatAddsUp) {
  const std::vector<std::string> texts = seed_texts();
  int loaded = 0;
  for (int run = 0; run < runs(); ++run) {
    Mutator mutator(static_cast<unsigned>(run));
    loaded += try_bytes(mutator.mutate(texts[mutator.below(texts.size())]));
    ASSERT_FALSE(HasFailure()) << "run " << run;
  }
  // Both ends of the reader must have been met, or the runs showed nothing.
  EXPECT_GT(loaded, runs() / 10);
  EXPECT_LT(loaded, runs());
}

TEST_F(FuzzLoad, NoiseIsNeverTakenForQuotes) {
  for (int run = 0; run < runs() / 4; ++run) {
    Mutator mutator(static_cast<unsigned>(run));
    EXPECT_FALSE(try_bytes(mutator.noise())) << "run " << run;
    ASSERT_FALSE(HasFailure()) << "run " << run;
  }
}

TEST_F(FuzzLoad, NoiseBehindASoundHeaderLosesNoRow) {
  const std::string header = "underlying,expiry,strike,put_call,bid,ask\n";
  constexpr std::string_view kLetters = "\"\"\",,,\n\r 0123456789.-PCHALYRD;\t";
  for (int run = 0; run < runs() / 4; ++run) {
    Mutator mutator(static_cast<unsigned>(run));
    std::string text = header;
    for (std::size_t left = mutator.below(400); left > 0; --left) {
      text += kLetters[mutator.below(kLetters.size())];
    }
    EXPECT_TRUE(try_bytes(text)) << "run " << run;
    ASSERT_FALSE(HasFailure()) << "run " << run;
  }
}

}  // namespace
}  // namespace duskgrid::quotes
