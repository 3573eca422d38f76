// A discount curve by zero rates.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::market {

struct ZeroPoint {
  double year_fraction;  // > 0
  double rate;           // continuous, decimals a year
};

// Zero rates linear in time between points and flat outside them.
class ZeroCurve {
 public:
  // Sorts the points. Failure (configuration): no point, two at one time, a time not > 0, a rate
  // beyond +-100 %.
  static Result<ZeroCurve> make(std::vector<ZeroPoint> points);
  double rate(double year_fraction) const;
  double discount_factor(double year_fraction) const;

 private:
  explicit ZeroCurve(std::vector<ZeroPoint> points) : points_(std::move(points)) {}
  std::vector<ZeroPoint> points_;
};

}  // namespace duskgrid::market
