// Random changes to texts for the fuzz tests; the same for the same seed.
#pragma once

#include <algorithm>
#include <cstdlib>
#include <random>
#include <string>
#include <utility>
#include <vector>

namespace duskgrid::fuzz {

// How many texts to try: DUSKGRID_FUZZ_RUNS, or enough for a few seconds.
inline int runs() {
  constexpr int kDefaultRuns = 2000;
  const char* text = std::getenv("DUSKGRID_FUZZ_RUNS");
  const int stated = text == nullptr ? 0 : std::atoi(text);
  return stated > 0 ? stated : kDefaultRuns;
}

class Mutator {
 public:
  // `morsels` are what readers stumble over, put in whole.
  Mutator(unsigned seed, const std::vector<std::string>& morsels)
      : random_(seed), morsels_(morsels) {}

  std::size_t below(std::size_t bound) {
    return std::uniform_int_distribution<std::size_t>(0, bound - 1)(random_);
  }
  // One of some texts with 0 to 4 changes.
  std::string mutate(const std::vector<std::string>& texts) {
    std::string text = texts[below(texts.size())];
    for (std::size_t left = below(5); left > 0; --left) change(text);
    return text;
  }

 private:
  void change(std::string& text) {
    const std::size_t at = below(text.size() + 1);
    const std::size_t length = std::min(below(text.size() - at + 1), 1 + below(30));
    const std::string& morsel = morsels_[below(morsels_.size())];
    switch (below(7)) {
      case 0: text.insert(at, morsel); break;
      case 1: text.erase(at, length); break;
      case 2: text.insert(at, text.substr(at, length)); break;
      case 3: text.replace(at, length, morsel); break;
      case 4: replace_number(text, at, morsel); break;
      case 5: text.resize(at); break;
      default:
        if (at < text.size()) text[at] = static_cast<char>(text[at] ^ (1 << below(8)));
    }
  }

  // The next number of the text becomes the morsel: hostile values in a sound form.
  static void replace_number(std::string& text, std::size_t at, const std::string& morsel) {
    constexpr const char* kOfNumbers = "0123456789.eE+-";
    const auto from = text.find_first_of("0123456789", at);
    if (from == std::string::npos) return;
    const auto to = std::min(text.find_first_not_of(kOfNumbers, from), text.size());
    text.replace(from, to - from, morsel);
  }

  std::mt19937 random_;
  const std::vector<std::string>& morsels_;
};

}  // namespace duskgrid::fuzz
