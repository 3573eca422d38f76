// A stored surface evaluated from the command line: its numbers against the library's, and one
// clear message and the documented exit status for each bad input.
#include <gtest/gtest.h>

#include <cmath>

#include "end_to_end/program.h"
#include "market/day_count.h"
#include "publish/surface_json.h"
#include "surface/derived.h"

namespace duskgrid::end_to_end {
namespace {

using namespace std::chrono_literals;

class ValueCommand : public testing::Test {
 protected:
  ValueCommand() {
    const quotes::Instant as_of = std::chrono::sys_days{std::chrono::year{2031} / 3 / 14} + 21h;
    const auto slice = [&](std::chrono::hours ahead, double forward, double discount,
                           surface::SliceParameters backbone) {
      return surface::Slice{as_of + ahead,
                            market::year_fraction(as_of, as_of + ahead),
                            forward,
                            discount,
                            backbone,
                            -0.4,
                            0.3};
    };
    surface_ = {"HALYRD",
                100,
                {slice(24h * 98, 101, 0.99, {0.01, -0.5, 0.15}),
                 slice(24h * 280, 103, 0.97, {0.03, -0.4, 0.25})}};
    surface_.slices[0].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2},
                                  {0.0002, 0.0004, -0.0002, 0.0003}};
    surface_.slices[0].to_next = surface::Between::price;
    as_of_ = {as_of, {"", -300min}};
    store(surface_);
  }

  void store(const surface::Surface& surface) const {
    const publish::StoredSurface stored{as_of_, surface};
    spill(json(), publish::surface_to_json(stored));
  }

  std::string json() const { return (scratch_ / "HALYRD.json").string(); }
  Ran value(const std::vector<std::string>& more) const {
    std::vector<std::string> arguments{"value", json()};
    arguments.insert(arguments.end(), more.begin(), more.end());
    return duskgrid(arguments);
  }
  // The table printed, which must be whole: no empty cell, and no word for what is no number.
  std::vector<Row> table(const std::vector<std::string>& more) const {
    const auto ran = value(more);
    EXPECT_EQ(ran.status, 0) << ran.err;
    EXPECT_TRUE(ran.err.empty()) << ran.err;
    EXPECT_EQ(ran.out.find("nan"), std::string::npos) << ran.out;
    EXPECT_EQ(ran.out.find("inf"), std::string::npos) << ran.out;
    spill(scratch_ / "out.csv", ran.out);
    return read_table(scratch_ / "out.csv");
  }
  // One message that starts with the program's name, and nothing printed.
  void expect_refused(const Ran& ran, int status, const std::string& holds) const {
    EXPECT_EQ(ran.status, status) << ran.err;
    EXPECT_EQ(ran.err.rfind("duskgrid: ", 0), 0u) << ran.err;
    EXPECT_EQ(std::count(ran.err.begin(), ran.err.end(), '\n'), 1) << ran.err;
    EXPECT_NE(ran.err.find(holds), std::string::npos) << ran.err;
    EXPECT_TRUE(ran.out.empty()) << ran.out;
  }

  Scratch scratch_;
  quotes::AsOf as_of_;
  surface::Surface surface_;
};

double number(const Row& row, const std::string& column) { return std::stod(row.at(column)); }

// Numbers are printed to round trip; the strike asked for and F e^k are an ulp or so apart, and a
// price far out moves by some tens of times that.
constexpr double kRounding = 1e-13;

TEST_F(ValueCommand, WithoutPointsEveryExpiryHasItsForwardAndAFewNodes) {
  const auto rows = table({});
  ASSERT_EQ(rows.size(), 10u);
  EXPECT_EQ(rows[0].at("expiry"), "2031-06-20T16:00:00-05:00");
  EXPECT_EQ(rows[2].at("strike"), "101");
  EXPECT_EQ(rows[2].at("log_moneyness"), "0");
  EXPECT_EQ(rows[2].at("put_call"), "C");
  EXPECT_EQ(rows[1].at("put_call"), "P");
  EXPECT_EQ(rows[7].at("strike"), "103");
}

TEST_F(ValueCommand, NumbersAreThoseOfTheLibrary) {
  const auto rows = table(
      {"--strike", "80,100", "--strike", "130", "--tenor", "1M,6M,2Y", "--expiry", "2031-06-20"});
  ASSERT_EQ(rows.size(), 12u);
  EXPECT_EQ(rows[0].at("tenor"), "");
  EXPECT_EQ(rows[3].at("tenor"), "1M");
  for (const auto& row : rows) {
    const double t = number(row, "year_fraction"), strike = number(row, "strike");
    const auto carried = surface::carried_at(surface_, t);
    EXPECT_EQ(number(row, "forward"), carried.forward);
    EXPECT_EQ(number(row, "discount_factor"), carried.discount_factor);
    const double k = std::log(strike / carried.forward);
    const auto d = surface::derived_at(surface::TimedSmile(surface_, t), carried, k).value();
    const auto near = [&](const char* column, double expected) {
      EXPECT_NEAR(number(row, column) / expected, 1, kRounding) << column << ' ' << t << ' ' << k;
    };
    near("log_moneyness", k);
    near("vol", d.vol);
    near("price", d.price);
    near("delta", d.greeks.delta);
    near("gamma", d.greeks.gamma);
    near("vega", d.greeks.vega);
    near("density", d.density.value());
    near("local_vol", d.local_vol.value());
    EXPECT_EQ(row.at("put_call"), strike < carried.forward ? "P" : "C");
  }
}

TEST_F(ValueCommand, SupportSaysWhatIsOutsideTheQuotes) {
  const auto supports = [&](const std::vector<std::string>& more) {
    std::string all;
    for (const auto& row : table(more)) all += row.at("support") + " ";
    return all;
  };
  EXPECT_EQ(supports({"--log-moneyness=-0.41,0,0.31", "--expiry", "2031-06-20"}),
            "extrapolated interpolated extrapolated ");
  EXPECT_EQ(supports({"--moneyness", "1", "--tenor", "1M,6M,2Y"}),
            "extrapolated interpolated extrapolated ");
}

TEST_F(ValueCommand, RatiosAndLogarithmsSayTheSamePoints) {
  const auto ratio = table({"--moneyness", "0.9", "--tenor", "3M"});
  const auto log = table({"--log-moneyness", "-0.10536051565782628", "--tenor", "3M"});
  const auto glued = table({"--log-moneyness=-0.10536051565782628", "--tenor", "3M"});
  ASSERT_EQ(ratio.size(), 1u);
  ASSERT_EQ(log.size(), 1u);
  EXPECT_NEAR(number(log[0], "price") / number(ratio[0], "price"), 1, kRounding);
  EXPECT_EQ(glued, log);
}

TEST_F(ValueCommand, TheSideAskedForIsPriced) {
  const auto put = table({"--strike", "120", "--put-call", "put"}),
             call = table({"--strike", "120", "--put-call", "C"});
  for (std::size_t i = 0; i < put.size(); ++i) {
    EXPECT_EQ(put[i].at("put_call"), "P");
    const double parity = number(put[i], "discount_factor") * (number(put[i], "forward") - 120);
    EXPECT_NEAR(number(call[i], "price") - number(put[i], "price"), parity, 100 * kRounding);
  }
}

TEST_F(ValueCommand, FileOfPointsGivesALineEachAndItsOwnOutputIsOne) {
  spill(scratch_ / "points.csv",
        "underlying,strike,expiry,tenor,put_call\nHALYRD,95,2031-06-20,,\n"
        "KELPWK,7,2031-06-20,,\nHALYRD,110,,1M,P\nHALYRD,90,2031-09-19T09:30,,C\n");
  const std::string points = (scratch_ / "points.csv").string();
  const auto rows = table({"--points", points});
  ASSERT_EQ(rows.size(), 3u);
  EXPECT_EQ(rows[0].at("put_call"), "P");
  EXPECT_EQ(rows[1].at("tenor"), "1M");
  EXPECT_EQ(rows[1].at("put_call"), "P");
  EXPECT_EQ(rows[2].at("put_call"), "C");
  EXPECT_EQ(rows[2].at("expiry"), "2031-09-19T09:30:00-05:00");
  EXPECT_EQ(table({"--points", (scratch_ / "out.csv").string()}), rows);
}

TEST_F(ValueCommand, VarianceSwapsAreALineAnExpiry) {
  const auto rows = table({"--variance-swaps", "--tenor", "1M,1Y", "--expiry", "2031-06-20"});
  ASSERT_EQ(rows.size(), 3u);
  for (const auto& row : rows) {
    const surface::TimedSmile smile(surface_, number(row, "year_fraction"));
    const auto swap = surface::variance_swap(smile).value();
    EXPECT_EQ(number(row, "swap_variance"), swap.variance);
    EXPECT_EQ(number(row, "swap_vol"), swap.vol);
    EXPECT_GT(swap.vol, number(row, "vol_at_forward"));
  }
  EXPECT_EQ(table({"--variance-swaps"}).size(), 2u);
}

TEST_F(ValueCommand, ZoneReadsAndPrintsLocalTimes) {
  const auto rows =
      table({"--zone", "America/New_York", "--strike", "100", "--expiry", "2031-06-20,2031-07-01"});
  ASSERT_EQ(rows.size(), 2u);
  EXPECT_EQ(rows[0].at("expiry"), "2031-06-20T17:00:00-04:00");  // the listed one
  EXPECT_EQ(rows[1].at("expiry"), "2031-07-01T16:00:00-04:00");
}

// Tenors and dates are those of the run, over the clock change of 2031-11-02 too.
TEST_F(ValueCommand, ZoneOfTheRunIsUsedUnlessOneIsGiven) {
  as_of_.clock = {"America/New_York", {}};
  store(surface_);
  const auto rows = table({"--strike", "100", "--tenor", "9M", "--expiry", "2031-06-20"});
  ASSERT_EQ(rows.size(), 2u);
  EXPECT_EQ(rows[0].at("expiry"), "2031-06-20T17:00:00-04:00");
  // The as-of is 17:00 of summer time.
  EXPECT_EQ(rows[1].at("expiry"), "2031-12-14T17:00:00-05:00");
  const auto paris = table({"--zone", "Europe/Paris", "--strike", "100", "--tenor", "9M"});
  EXPECT_EQ(paris[0].at("expiry"), "2031-12-14T22:00:00+01:00");
}

TEST_F(ValueCommand, NumbersThatDoNotExistAreEmptyCells) {
  const auto ran = value({"--log-moneyness=800,-800", "--tenor", "1M"});
  EXPECT_EQ(ran.status, 0) << ran.err;
  spill(scratch_ / "out.csv", ran.out);
  const auto rows = read_table(scratch_ / "out.csv");
  ASSERT_EQ(rows.size(), 2u);
  for (const auto& row : rows) {
    EXPECT_EQ(row.size(), 16u);
    EXPECT_EQ(row.at("vol"), "");
    EXPECT_EQ(row.at("local_vol"), "");
  }
}

// An overlay that no fit gives takes the variance below zero at the money of the first expiry.
TEST_F(ValueCommand, PointsWithoutAVolatilityAreEmptyCells) {
  auto sunk = surface_;
  sunk.slices[0].overlay = {{-0.3, -0.2, -0.1, 0, 0.1, 0.2}, {0, 0, -0.2, 0}};
  for (const auto rule : {surface::Between::variance, surface::Between::price}) {
    sunk.slices[0].to_next = rule;
    store(sunk);
    for (const std::string time : {"--expiry=2031-06-20", "--tenor=1M", "--tenor=14W"}) {
      const auto ran = value({"--log-moneyness=-0.4,0", time});
      EXPECT_EQ(ran.status, 0) << ran.err;
      EXPECT_EQ(ran.out.find("nan"), std::string::npos) << ran.out;
      spill(scratch_ / "out.csv", ran.out);
      const auto rows = read_table(scratch_ / "out.csv");
      ASSERT_EQ(rows.size(), 2u);
      EXPECT_NE(rows[0].at("vol"), "");
      for (const char* column : {"vol", "put_call", "price", "delta", "density", "local_vol"})
        EXPECT_EQ(rows[1].at(column), "") << column << ' ' << time;
      const auto swaps = value({"--variance-swaps", time});
      EXPECT_EQ(swaps.status, 0) << swaps.err;
      spill(scratch_ / "out.csv", swaps.out);
      const auto lines = read_table(scratch_ / "out.csv");
      ASSERT_EQ(lines.size(), 1u);
      for (const char* column : {"vol_at_forward", "swap_vol", "swap_variance"})
        EXPECT_EQ(lines[0].at(column), "") << column << ' ' << time;
    }
  }
}

TEST_F(ValueCommand, BadOptionsAreUsageAndNamed) {
  expect_refused(value({"--strike", "100,far"}), 64, "--strike has 'far'");
  expect_refused(value({"--strike", "-5"}), 64, "--strike has '-5'");
  expect_refused(value({"--strike", "nan"}), 64, "--strike");
  expect_refused(value({"--moneyness", "90"}), 64, "K/F");
  expect_refused(value({"--log-moneyness", "inf"}), 64, "--log-moneyness");
  expect_refused(value({"--expiry", "soon"}), 64, "--expiry: 'soon'");
  expect_refused(value({"--expiry", "2031-03-14"}), 64, "as-of");
  expect_refused(value({"--tenor", "1M,5"}), 64, "--tenor: '5'");
  expect_refused(value({"--put-call", "both"}), 64, "--put-call is 'both'");
  expect_refused(value({"--zone", "Atlantis/Harbour"}), 64, "Atlantis/Harbour");
  expect_refused(value({"--variance-swaps", "--strike", "100"}), 64, "--variance-swaps");
  expect_refused(value({"--points", "x.csv", "--strike", "100"}), 64, "--points");
  EXPECT_EQ(duskgrid({"value"}).status, 64);
  EXPECT_EQ(value({"--sideways"}).status, 64);
  EXPECT_EQ(value({"--strike"}).status, 64);
}

TEST_F(ValueCommand, FilesThatAreNoneOrNotSuchAreToldApart) {
  const auto with = [&](const std::string& file) {
    return duskgrid({"value", (scratch_ / file).string()});
  };
  expect_refused(with("no.json"), 66, "no.json");
  fs::create_directories(scratch_ / "folder");
  expect_refused(with("folder"), 66, "folder");
  spill(scratch_ / "grid.csv", "strike,vol,forward,year_fraction\n100,0.2,100,0.5\n");
  expect_refused(with("grid.csv"), 65, "not a stored surface");
  spill(scratch_ / "empty.json", "");
  expect_refused(with("empty.json"), 65, "not a stored surface");
  expect_refused(value({"--points", (scratch_ / "no.csv").string()}), 66, "no.csv");
  const auto points = [&](const std::string& text) {
    spill(scratch_ / "points.csv", text);
    return value({"--points", (scratch_ / "points.csv").string()});
  };
  expect_refused(points("strike,expiry\n100,2031-06-20\nfar,2031-06-20\n"), 65, "line 3");
  expect_refused(points("strike,expiry\n100,2031-06-20\n100,2030-06-20\n"), 65, "line 3");
  expect_refused(points("strike,tenor\n100,soon\n"), 65, "line 2");
  expect_refused(points("level,expiry\n100,2031-06-20\n"), 65, "level");
  expect_refused(points("underlying,strike,expiry\nKELPWK,7,2031-06-20\n"), 65, "HALYRD");
}

}  // namespace
}  // namespace duskgrid::end_to_end
