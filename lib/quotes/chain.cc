#include "quotes/chain.h"

#include <algorithm>
#include <numeric>
#include <tuple>

namespace duskgrid::quotes {

std::vector<Chain> group_chains(const QuoteTable& table) {
  std::vector<std::int32_t> names(table.underlyings.size());
  std::iota(names.begin(), names.end(), 0);
  std::sort(names.begin(), names.end(), [&](std::int32_t a, std::int32_t b) {
    return table.underlyings[a] < table.underlyings[b];
  });
  std::vector<Chain> chains(names.size());
  std::vector<std::size_t> position(names.size());
  for (std::size_t i = 0; i < names.size(); ++i) {
    chains[i].underlying = names[i];
    position[names[i]] = i;
  }

  std::vector<std::uint32_t> rows;
  rows.reserve(table.quotes.size());
  for (std::uint32_t i = 0; i < table.quotes.size(); ++i) {
    const Quote& q = table.quotes[i];
    if (q.underlying < 0) continue;
    ++chains[position[q.underlying]].read;
    if (q.reason != Reason::unreadable && q.reason != Reason::duplicate) rows.push_back(i);
  }
  const auto key = [&](std::uint32_t i) {
    const Quote& q = table.quotes[i];
    return std::tuple(position[q.underlying], q.expiry, q.strike, q.put_call, i);
  };
  std::sort(rows.begin(), rows.end(),
            [&](std::uint32_t a, std::uint32_t b) { return key(a) < key(b); });
  for (const std::uint32_t i : rows) {
    const Quote& q = table.quotes[i];
    auto& slices = chains[position[q.underlying]].slices;
    if (slices.empty() || slices.back().expiry != q.expiry) slices.push_back({q.expiry, {}});
    slices.back().rows.push_back(i);
  }
  return chains;
}

}  // namespace duskgrid::quotes
