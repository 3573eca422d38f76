#include "night/expiries.h"

#include <fmt/format.h>

#include <algorithm>
#include <iterator>

#include "publish/digest.h"

namespace duskgrid::night {
namespace {

std::string print_of(const quotes::QuoteTable& table, const quotes::ChainSlice& slice) {
  constexpr std::size_t kDigits = 16;
  fmt::memory_buffer text;
  for (const auto row : slice.rows) {
    const auto& q = table.quotes[row];
    fmt::format_to(std::back_inserter(text), "{} {} {} {}\n", q.strike,
                   q.put_call == quotes::PutCall::call ? 'C' : 'P', q.bid, q.ask);
  }
  publish::Sha256 sum;
  sum.add({text.data(), text.size()});
  return sum.hex().substr(0, kDigits);
}

}  // namespace

std::vector<publish::ExpiryRow> expiry_rows(const quotes::QuoteTable& table,
                                            const quotes::Chain& chain,
                                            const std::vector<SliceQuality>& quality) {
  std::vector<publish::ExpiryRow> rows;
  for (const auto& slice : chain.slices) {
    publish::ExpiryRow row{
        slice.expiry,          static_cast<std::int64_t>(slice.rows.size()), 0, 0, quotes::kAbsent,
        print_of(table, slice)};
    const auto found = std::find_if(quality.begin(), quality.end(),
                                    [&](const auto& q) { return q.expiry == slice.expiry; });
    if (found != quality.end()) {
      row.used = found->used;
      row.inside = found->inside;
      row.rms_vol = found->rms_vol;
    }
    rows.push_back(std::move(row));
  }
  return rows;
}

}  // namespace duskgrid::night
