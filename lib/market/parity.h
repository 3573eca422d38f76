// Forwards and discount factors of one underlying from put-call parity on bid/ask
// intervals. For European prices; pricing/american_forwards.h carries on for American ones.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "market/curve.h"
#include "market/dividends.h"

namespace duskgrid::market {

// Call and put of one strike. Parity says D (F - K) lies in [low, high] =
// [call bid - put ask, call ask - put bid], quote currency.
struct ParityPair {
  double strike;
  double low;
  double high;
  double straddle;  // call mid + put mid, for how far the money reaches
};

struct ExpiryPairs {
  double year_fraction;           // > 0
  std::vector<ParityPair> pairs;  // by strike
  std::optional<double> given_forward;
  bool american = false;  // early exercise: parity holds only near the money
};

enum class ForwardSource : std::uint8_t { parity, given, curve, carried };
std::string_view word(ForwardSource source);

struct ForwardEstimate {
  double forward;  // quote currency
  double discount_factor;
  double zero_rate;             // continuous, decimals a year
  std::optional<double> carry;  // q in F = S exp((r - q) t), when the spot is known
  int pairs = 0;                // used; 0 when not from parity
  int breaks = 0;               // near-the-money pairs whose interval excludes the forward
  ForwardSource source = ForwardSource::parity;
  // What the near-the-money intervals allow; low > high when they contradict one
  // another, NaN without a pair.
  double lowest_forward;
  double highest_forward;
};

struct ParityOptions {
  // Deviation of an expiry's own zero rate from the given curve, or from the rate
  // common to all expiries, that counts as one standard error. Decimals a year. Range:
  // > 0. Smaller trusts the curve more.
  double rate_tolerance_given = 0.0025;
  double rate_tolerance_common = 0.005;
  // Pairs near the money: within this many at-the-money deviations, ... Range: > 0.
  double near_deviations = 1.0;
  // ... at most so many, nearest first. Range: >= 1.
  int most_near_pairs = 12;
  std::optional<std::string> problem() const;
};

struct KnownMarket {
  std::optional<double> spot;
  std::optional<double> carry;  // continuous yield on top of the dividends, decimals a year
  std::optional<ZeroCurve> curve;
  std::vector<Dividend> dividends = {};
};

using ForwardEstimates = std::vector<std::optional<ForwardEstimate>>;

// One estimate an expiry (increasing in time), or nothing where there is no forward: none given and
// no pair. The discount of an expiry is a robust weighted regression of call minus put on
// strike, drawn to the curve, or to the rate that all expiries share, in proportion to their
// errors, so that a short expiry cannot invent a rate. The forward is the spread-weighted mean of
// the near-the-money pairs held inside the intersection of their intervals; when they have none in
// common, inside that of the most pairs that agree, and the others are breaks.
ForwardEstimates parity_forwards(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                                 const ParityOptions& options);

// Fills the expiries without an estimate from the spot, where it is known: by its dividends, and
// the carry known or else the yield on top of them of the nearest expiry that has one.
void fill_from_carry(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                     const ParityOptions& options, ForwardEstimates& estimates);

// Both.
ForwardEstimates estimate_forwards(std::span<const ExpiryPairs> expiries, const KnownMarket& known,
                                   const ParityOptions& options);

// The pairs near the money by which the forward is placed, nearest first. The money is where the
// pairs put it, or at `around`.
std::vector<ParityPair> near_pairs(const ExpiryPairs& expiry, double discount_factor,
                                   const ParityOptions& options, std::optional<double> around = {});
// Whether the rate of some expiry can be read off its pairs.
bool any_rate_readable(std::span<const ExpiryPairs> expiries);
// Places the forward, and what goes with it, by near pairs (at least one) and the estimate's
// discount factor.
void place_forward(std::span<const ParityPair> near, ForwardEstimate& estimate);
// How many of the near pairs have an interval that excludes the estimate's forward.
int count_breaks(std::span<const ParityPair> near, const ForwardEstimate& estimate);

}  // namespace duskgrid::market
