// Proof that a quantity is nowhere negative over ranges of k, by halving those where its enclosure
// does not tell. For certificate.h.
#pragma once

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <cstdint>

namespace duskgrid::arbitrage {

// A range of log-moneyness, or of its inverse, and of the weight of the later of two smiles.
struct Box {
  double low, high;
  double weight_low = 0, weight_high = 1;
  int depth = 0, weight_depth = 0;
  double centre() const { return low + 0.5 * (high - low); }
};

// What an enclosure says of a box.
struct Look {
  double least;                 // nowhere in the box is the quantity below this
  double most;                  // at the centre it is not above this
  double value;                 // what to report of the centre
  bool positive_fails = false;  // total volatility is not positive at the centre
  bool split_weight = false;    // halve the weights next
};

// The worst of what was found, or the first place that was left open.
struct Search {
  explicit Search(std::int64_t most_boxes) : left(most_boxes) {}

  std::int64_t left, used = 0;
  bool broken = false, open = false, positive_fails = false;
  double k = 0, value = 0;

  bool proved() const { return !broken && !open; }

  // look(Box) -> Look, k_of(double) -> k of a place in the box. NaN is never a proof.
  template <class LookAt, class KOf>
  void over(const Box& root, LookAt look_at, KOf k_of) {
    std::array<Box, kMostDepth + kMostWeightDepth + 2> stack;
    std::size_t size = 0;
    stack[size++] = root;
    double goal = 0;  // after a break: what a worse one would have to be below
    while (size > 0 && left > 0) {
      const Box box = stack[--size];
      --left;
      ++used;
      const Look look = look_at(box);
      if (look.least >= goal) continue;
      if (look.most < goal) {
        goal = look.most * kWorthwhile;
        left = std::min(left, kAfterBreak);
        note_break(look, k_of(box.centre()));
      }
      const bool by_weight = look.split_weight && box.weight_depth < kMostWeightDepth;
      if (!by_weight && !divisible(box)) {
        if (!broken) note_open(look, k_of(box.centre()));
        continue;
      }
      Box first = box, second = box;
      if (by_weight) {
        first.weight_high = second.weight_low = 0.5 * (box.weight_low + box.weight_high);
        ++first.weight_depth, ++second.weight_depth;
      } else {
        first.high = second.low = box.centre();
        ++first.depth, ++second.depth;
      }
      stack[size++] = second;
      stack[size++] = first;
    }
    if (size > 0 && !broken) note_open({0, 0, 0}, k_of(stack[size - 1].centre()));
  }

 private:
  static constexpr int kMostDepth = 60;  // beyond the digits of a double
  static constexpr int kMostWeightDepth = 40;
  static constexpr double kWorthwhile = 1.01;        // a break is worth improving by 1 %
  static constexpr std::int64_t kAfterBreak = 500;   // boxes spent on improving it
  static constexpr std::int64_t kAfterOpen = 2'000;  // and on finding one where rounding hides it

  static bool divisible(const Box& box) {
    const double centre = box.centre();
    return box.depth < kMostDepth && box.low < centre && centre < box.high;
  }

  void note_break(const Look& look, double at) {
    if (broken && look.positive_fails == positive_fails && !(look.value < value)) return;
    if (positive_fails && !look.positive_fails) return;
    broken = true;
    positive_fails = look.positive_fails;
    k = at;
    value = look.value;
  }

  void note_open(const Look& look, double at) {
    left = std::min(left, kAfterOpen);
    if (open) return;
    open = true;
    k = at;
    value = std::isfinite(look.value) ? look.value : 0;
  }
};

}  // namespace duskgrid::arbitrage
