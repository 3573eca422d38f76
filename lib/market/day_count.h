// Time between instants in years.
#pragma once

#include "quotes/quote.h"

namespace duskgrid::market {

// ACT/365F to the second: elapsed seconds over 365 days of 86,400. Negative when `to` is
// before `from`.
double year_fraction(quotes::Instant from, quotes::Instant to);

}  // namespace duskgrid::market
