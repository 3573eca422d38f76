// One underlying through all stages: forwards, volatilities, surface, checks, grid.
#pragma once

#include <optional>
#include <vector>

#include "arbitrage/violation.h"
#include "night/config.h"
#include "publish/expiries.h"
#include "publish/run_record.h"
#include "publish/tables.h"
#include "quotes/chain.h"

namespace duskgrid::night {

// How well one expiry is met.
struct SliceQuality {
  quotes::Instant expiry;
  std::int64_t used;
  std::int64_t inside;  // used quotes whose spread the surface meets
  double rms_vol;       // of vol_fit - vol_mid over used quotes, decimals a year
};

struct MarkedUnderlying {
  publish::UnderlyingRecord record;
  std::vector<publish::ForwardRow> forwards;
  std::vector<publish::FinancingRow> financing;  // of every expiry that lies ahead
  std::vector<SliceQuality> quality;
  std::vector<arbitrage::Violation> violations;
  std::optional<surface::Surface> surface;
  std::optional<double> spot;                // tonight's, quote currency
  std::vector<publish::ExpiryRow> expiries;  // by expiry; those of its quotes
  std::vector<publish::GridNode> grid;
};

// Marks one chain of a cleaned table. Touches only the quotes of this chain, so chains of a table
// may be marked at the same time. Never fails: what cannot be marked is refused with a message.
MarkedUnderlying mark_underlying(quotes::QuoteTable& table, const quotes::Chain& chain,
                                 const NightConfig& config, const ResolvedNight& night);

}  // namespace duskgrid::night
