// The CSV tables of a run and of single values. Each has a header line and one writer a row;
// columns are described in docs/formats.md.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <unordered_map>
#include <utility>

#include "arbitrage/violation.h"
#include "market/parity.h"
#include "publish/expiries.h"
#include "publish/grid.h"
#include "publish/values.h"
#include "quotes/instants.h"
#include "quotes/quote.h"

namespace duskgrid::publish {

inline constexpr std::string_view kGridHeader =
    "as_of,underlying,expiry,tenor,year_fraction,forward,discount_factor,axis,point,strike,vol,"
    "vol_low,vol_high,support\n";
inline constexpr std::string_view kLedgerHeader =
    "file,line,underlying,expiry,strike,put_call,exercise,quoted_in,bid,ask,state,reason,note,"
    "vol_bid,vol_ask,vol_fit,miss\n";
inline constexpr std::string_view kForwardsHeader =
    "underlying,expiry,year_fraction,forward,discount_factor,zero_rate,carry,pairs,breaks,source\n";
inline constexpr std::string_view kFinancingHeader =
    "underlying,expiry,exercise,spot,spot_origin,zero_rate,rate_origin,dividends,dividend_effect,"
    "borrow,borrow_origin\n";
inline constexpr std::string_view kViolationsHeader =
    "underlying,scope,kind,expiry,expiry_2,strike_1,strike_2,strike_3,amount,vol_points,"
    "half_spreads,legs\n";

inline constexpr std::string_view kValuesHeader =
    "expiry,tenor,year_fraction,forward,discount_factor,strike,log_moneyness,vol,put_call,price,"
    "delta,gamma,vega,density,local_vol,support\n";
inline constexpr std::string_view kSwapsHeader =
    "expiry,tenor,year_fraction,forward,discount_factor,vol_at_forward,swap_vol,swap_variance\n";

struct ForwardRow {
  quotes::Instant expiry;
  double year_fraction;
  market::ForwardEstimate estimate;
};

// Where a number of the market comes from.
enum class Origin : std::uint8_t {
  none,      // there is no such number
  given,     // stated, by a configuration or a file of the market
  rows,      // read off the quote rows
  inferred,  // from call-put parity
  near,      // that of the nearest expiry that has one
  assumed,   // nothing says; 0
};
std::string_view word(Origin origin);
// How early exercise was taken into account at an expiry.
enum class ExerciseTaken : std::uint8_t { european, american, american_as_european };
std::string_view word(ExerciseTaken taken);

// What carries the spot to one expiry, and what of it was given and what inferred.
struct FinancingRow {
  quotes::Instant expiry;
  ExerciseTaken exercise;
  double spot = quotes::kAbsent;  // quote currency
  Origin spot_origin = Origin::none;
  double zero_rate = quotes::kAbsent;  // continuous, decimals a year
  Origin rate_origin = Origin::none;
  std::size_t dividends = 0;                 // given, that go ex before the expiry
  double dividend_effect = quotes::kAbsent;  // on the forward, quote currency, at most 0
  double borrow = quotes::kAbsent;           // on top of them, continuous, decimals a year
  Origin borrow_origin = Origin::none;
};

// Instants as text on one clock. Each is worked out once: a table of a million lines has a few
// hundred.
class InstantTexts {
 public:
  explicit InstantTexts(quotes::Clock clock) : clock_(std::move(clock)) {}
  const std::string& of(quotes::Instant instant);

 private:
  quotes::Clock clock_;
  std::unordered_map<std::int64_t, std::string> texts_;  // by seconds
};

// Lines with their line feed. Numbers that do not exist are empty cells.
std::string grid_line(const GridNode& node, Axis axis, std::string_view underlying,
                      quotes::Instant as_of, InstantTexts& instants);
std::string ledger_line(const quotes::Quote& quote, const quotes::QuoteTable& table,
                        InstantTexts& instants);
std::string forwards_line(const ForwardRow& row, std::string_view underlying,
                          const quotes::Clock& clock);
std::string financing_line(const FinancingRow& row, std::string_view underlying,
                           const quotes::Clock& clock);
std::string expiries_line(const ExpiryRow& row, std::string_view underlying,
                          InstantTexts& instants);
std::string violations_line(const arbitrage::Violation& violation, std::string_view underlying,
                            const quotes::Clock& clock);
std::string values_line(const ValueTime& time, const ValueRow& row, InstantTexts& instants);
// vol_at_forward in decimals a year.
std::string swaps_line(const ValueTime& time, double vol_at_forward,
                       const std::optional<surface::VarianceSwap>& swap, InstantTexts& instants);

}  // namespace duskgrid::publish
