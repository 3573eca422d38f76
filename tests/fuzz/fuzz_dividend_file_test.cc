// Hostile files of dividends: mutated at random they must give a failure that says something, or
// dividends from which every forward is a number or none. The seed of each run is its number,
// printed when it fails.
#include <gtest/gtest.h>
#include <unistd.h>

#include <cmath>
#include <filesystem>
#include <fstream>

#include "market/dividend_file.h"
#include "mutate.h"

namespace duskgrid::market {
namespace {

using namespace std::chrono_literals;

const std::vector<std::string>& seed_texts() {
  static const std::vector<std::string> kTexts{
      "underlying,ex_date,amount\nHALYRD,2031-05-02,0.42\nHALYRD,2031-08-01,0.44\n",
      "\xEF\xBB\xBF"
      "Underlying;Ex Date;Amount;Kind\r\nSALTPN;20310602;0.01;proportional\r\n"
      "\"KELPWK\";2031-06-03T09:30;1e1;cash\r\n",
      "kind\tamount\tex_date\tunderlying\ncash\t0\t1939752000\tTIDLCK\n",
  };
  return kTexts;
}

const std::vector<std::string>& morsels() {
  static const std::vector<std::string> kMorsels{"\"",
                                                 "\n",
                                                 "\r\n",
                                                 ",",
                                                 ";",
                                                 "-0.2",
                                                 "nan",
                                                 "inf",
                                                 "1e999",
                                                 "1e308",
                                                 "5e-324",
                                                 "99999999999",
                                                 "2031-02-30",
                                                 "2199-12-31",
                                                 "amount,",
                                                 "kind",
                                                 "proportional",
                                                 "HALYRD,2031-05-02,0.42\n",
                                                 "\xFF\xFE",
                                                 std::string(1, '\0'),
                                                 std::string(300, '9'),
                                                 std::string(300, ',')};
  return kMorsels;
}

void check_dividends(const std::vector<DatedDividend>& dated) {
  const quotes::Instant as_of = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
  const auto dividends = dividends_after(as_of, dated);
  for (const auto& d : dividends) EXPECT_EQ(amount_problem(d.kind, d.amount), std::nullopt);
  for (const double t : {0.01, 0.5, 3.0}) {
    const Financing financing{100, 0.03, 0.01, t};
    const double forward = forward_of(financing, dividends);
    EXPECT_FALSE(std::isnan(forward));
    const auto borrow = borrow_of(forward, financing, dividends);
    if (borrow) {
      EXPECT_LE(std::abs(*borrow), kMostBorrow);
    }
  }
}

TEST(FuzzDividendFile, MutatedFilesGiveAFailureOrDividendsWithForwards) {
  const std::string path = testing::TempDir() + "fuzz_dividends_" + std::to_string(::getpid());
  int taken = 0;
  for (int run = 0; run < fuzz::runs(); ++run) {
    fuzz::Mutator mutator(static_cast<unsigned>(run), morsels());
    const std::string text = mutator.mutate(seed_texts());
    std::ofstream(path, std::ios::binary) << text;
    const auto file = read_dividends(path, quotes::Clock{"", -300min});
    if (file) {
      for (const auto& [name, dated] : file->table) check_dividends(dated);
      ++taken;
    } else {
      EXPECT_EQ(file.failure().fault, Fault::not_quotes);
      EXPECT_EQ(file.failure().where, path);
      EXPECT_FALSE(file.failure().detail.empty());
    }
    ASSERT_FALSE(HasFailure()) << "run " << run << ":\n" << text;
  }
  std::filesystem::remove(path);
  // Both ends of the reader must have been met, or the runs showed nothing.
  EXPECT_GT(taken, fuzz::runs() / 20);
  EXPECT_LT(taken, fuzz::runs());
}

}  // namespace
}  // namespace duskgrid::market
