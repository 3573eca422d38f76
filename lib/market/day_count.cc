#include "market/day_count.h"

namespace duskgrid::market {

double year_fraction(quotes::Instant from, quotes::Instant to) {
  constexpr double kSecondsAYear = 365.0 * 86400.0;
  return static_cast<double>((to - from).count()) / kSecondsAYear;
}

}  // namespace duskgrid::market
