#include "chain_picture.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <vector>

#include "console.h"

namespace duskgrid::commands {
namespace {

constexpr std::size_t kColumns = 64, kMostExpiries = 24;

struct Cell {
  int contracts = 0, two_sided = 0;
};

// Strikes by rank, so that a dense middle is not pressed together by far wings.
std::vector<double> strikes_of(const quotes::QuoteTable& table, const quotes::Chain& chain) {
  std::vector<double> strikes;
  for (const auto& slice : chain.slices)
    for (const auto row : slice.rows) strikes.push_back(table.quotes[row].strike);
  std::sort(strikes.begin(), strikes.end());
  strikes.erase(std::unique(strikes.begin(), strikes.end()), strikes.end());
  return strikes;
}

class Picture {
 public:
  Picture(const quotes::QuoteTable& table, const quotes::Chain& chain)
      : table_(table),
        strikes_(strikes_of(table, chain)),
        width_(std::min(kColumns, strikes_.size())) {}

  std::vector<Cell> line(const quotes::ChainSlice& slice) const {
    std::vector<Cell> cells(width_);
    for (const auto row : slice.rows) {
      const auto& q = table_.quotes[row];
      const auto rank = static_cast<std::size_t>(
          std::lower_bound(strikes_.begin(), strikes_.end(), q.strike) - strikes_.begin());
      auto& cell = cells[rank * width_ / strikes_.size()];
      ++cell.contracts;
      if (q.bid > 0 && q.ask >= q.bid) ++cell.two_sided;
    }
    return cells;
  }

  // Lowest, middle and highest strike under their columns.
  std::string scale() const {
    const auto text = [](double strike) { return fmt::format("{:.6g}", strike); };
    std::string out = text(strikes_.front());
    const std::string middle = text(strikes_[strikes_.size() / 2]), last = text(strikes_.back());
    const auto place = [&](std::size_t at, const std::string& what) {
      if (out.size() + 1 > at) return;
      out.resize(at, ' ');
      out += what;
    };
    place(width_ / 2, middle);
    place(width_ - std::min(width_, last.size()), last);
    return out;
  }

 private:
  const quotes::QuoteTable& table_;
  std::vector<double> strikes_;
  std::size_t width_;
};

// None is the lightest, all the darkest, and what is between looks like neither.
std::size_t darkness(const Cell& cell) {
  if (cell.two_sided == 0) return 0;
  if (cell.two_sided == cell.contracts) return 4;
  return static_cast<std::size_t>(1 + 3 * cell.two_sided / cell.contracts);
}

const char* shade(const Cell& cell, bool blocks) {
  constexpr std::array<const char*, 5> kLetters{".", "-", "+", "*", "#"};
  constexpr std::array<const char*, 5> kBlocks{"\u00b7", "\u2591", "\u2592", "\u2593", "\u2588"};
  if (cell.contracts == 0) return " ";
  return (blocks ? kBlocks : kLetters)[darkness(cell)];
}

}  // namespace

std::string chain_picture(const quotes::QuoteTable& table, const quotes::Chain& chain,
                          const quotes::Clock& clock, bool blocks) {
  const Picture picture(table, chain);
  std::string out = fmt::format(
      "{}: expiries down, strikes across; {} no bid, {} all quoted on both sides\n",
      console::shortened(table.underlyings[static_cast<std::size_t>(chain.underlying)], 20),
      shade({1, 0}, blocks), shade({1, 1}, blocks));
  const auto shown = std::min(chain.slices.size(), kMostExpiries);
  for (std::size_t i = 0; i < shown; ++i) {
    out += quotes::format_date(clock, chain.slices[i].expiry) + "  ";
    for (const auto& cell : picture.line(chain.slices[i])) out += shade(cell, blocks);
    out += '\n';
  }
  if (shown < chain.slices.size())
    out += fmt::format("and {} more expiries\n", chain.slices.size() - shown);
  return out + std::string(12, ' ') + picture.scale() + '\n';
}

}  // namespace duskgrid::commands
