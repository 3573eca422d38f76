// The lines of expiries.csv of one underlying.
#pragma once

#include <vector>

#include "night/mark.h"

namespace duskgrid::night {

// One row an expiry of the chain, by expiry; `quality` is of those in the surface. The print is of
// strike, side, bid and ask of every contract in the chain, whatever became of it, so that a file
// sent twice shows; times and sizes do not count.
std::vector<publish::ExpiryRow> expiry_rows(const quotes::QuoteTable& table,
                                            const quotes::Chain& chain,
                                            const std::vector<SliceQuality>& quality);

}  // namespace duskgrid::night
