// The exact sign of a short sum of doubles and products of two doubles.
#pragma once

#include <array>
#include <cassert>
#include <cmath>
#include <cstddef>
#include <span>

namespace duskgrid::arbitrage {

// A non-overlapping expansion, grown term by term: J. R. Shewchuk, "Adaptive precision
// floating-point arithmetic and fast robust geometric predicates", Discrete & Computational
// Geometry 18 (1997) 305-363, theorem 10. Exact unless something over- or underflows, which is then
// told.
class ExactSum {
 public:
  ExactSum& add(double x) {
    assert(count_ < parts_.size());
    for (std::size_t i = 0; i < count_; ++i) {
      const double sum = x + parts_[i];
      const double shadow = sum - x;
      parts_[i] = (x - (sum - shadow)) + (parts_[i] - shadow);
      x = sum;
    }
    parts_[count_++] = x;
    known_ = known_ && std::isfinite(x);
    return *this;
  }

  ExactSum& add_product(double x, double y) {
    const double product = x * y;
    // Far enough from underflow for the rest to be a double.
    known_ = known_ && (x == 0 || y == 0 || std::abs(product) > 0x1p-900);
    return add(std::fma(x, y, -product)).add(product);
  }

  // All false if the sign is not known.
  bool positive() const { return known_ && leading() > 0; }
  bool negative() const { return known_ && leading() < 0; }
  bool not_negative() const { return known_ && leading() >= 0; }

  // They add up to the sum, exactly if it is known. Least first.
  std::span<const double> parts() const { return {parts_.data(), count_}; }
  bool known() const { return known_; }

 private:
  double leading() const {
    for (std::size_t i = count_; i-- > 0;)
      if (parts_[i] != 0) return parts_[i];
    return 0;
  }

  std::array<double, 12> parts_{};
  std::size_t count_ = 0;
  bool known_ = true;
};

}  // namespace duskgrid::arbitrage
