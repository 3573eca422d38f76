#include "quotes/clean.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <bit>
#include <cmath>
#include <limits>
#include <span>
#include <string_view>
#include <tuple>
#include <vector>

namespace duskgrid::quotes {
namespace {

constexpr double kSecondsPerHour = 3600;

double seconds_between(Instant from, Instant to) {
  return static_cast<double>((to - from).count());
}

bool is_positive(double x) { return x > 0 && std::isfinite(x); }

// The remarks of this stage. Fixed texts: the table shares one copy between all rows.
enum class Remark : std::uint8_t { none, adjusted, multiplier, later, narrower, better, same };
constexpr std::array<std::string_view, 7> kRemarks{"",
                                                   "adjusted contract",
                                                   "odd multiplier",
                                                   "a later quote is kept",
                                                   "a narrower quote is kept",
                                                   "a better quote is kept",
                                                   "the same quote is kept"};

// Looks each remark up in the table once a run and not once a row.
class Remarks {
 public:
  explicit Remarks(QuoteTable& table) : table_(table) { indices_.fill(-1); }
  void drop(Quote& quote, Reason reason, Remark remark) {
    quote.reason = reason;
    if (remark == Remark::none) return;
    const auto which = static_cast<std::size_t>(remark);
    if (indices_[which] < 0) indices_[which] = table_.note_index(std::string(kRemarks[which]));
    quote.note = indices_[which];
  }

 private:
  QuoteTable& table_;
  std::array<std::int32_t, kRemarks.size()> indices_;
};

bool states_multiplier(const Quote& q) {
  return q.reason != Reason::unreadable && q.underlying >= 0 && is_positive(q.multiplier);
}

// The multiplier that most rows of each underlying state; kAbsent where none does.
std::vector<double> ordinary_multipliers(const QuoteTable& table) {
  std::vector<double> ordinary(table.underlyings.size(), kAbsent);
  std::vector<bool> differ(table.underlyings.size(), false);
  for (const Quote& q : table.quotes) {
    if (!states_multiplier(q)) continue;
    double& first = ordinary[q.underlying];
    if (std::isnan(first)) first = q.multiplier;
    if (first != q.multiplier) differ[q.underlying] = true;
  }
  if (std::find(differ.begin(), differ.end(), true) == differ.end()) return ordinary;

  // Only names whose rows disagree, which are few, are counted.
  std::vector<std::pair<std::int32_t, double>> stated;
  for (const Quote& q : table.quotes) {
    if (states_multiplier(q) && differ[q.underlying]) {
      stated.emplace_back(q.underlying, q.multiplier);
    }
  }
  std::sort(stated.begin(), stated.end());
  std::vector<std::ptrdiff_t> most(table.underlyings.size(), 0);
  for (auto run = stated.begin(); run != stated.end();) {
    const auto end = std::find_if(run, stated.end(), [&](const auto& s) { return s != *run; });
    // Runs of one underlying come by rising multiplier: a later equal count does not win.
    if (end - run > most[run->first]) {
      most[run->first] = end - run;
      ordinary[run->first] = run->second;
    }
    run = end;
  }
  return ordinary;
}

// The first of expired, too-short and stale that applies, else none.
Reason judge_time(const Quote& q, Instant as_of, const CleanOptions& options) {
  if (q.expiry <= as_of) return Reason::expired;
  if (seconds_between(as_of, q.expiry) < options.shortest_hours * kSecondsPerHour) {
    return Reason::too_short;
  }
  const bool stale = options.stale_hours > 0 && q.quote_time != kNoInstant &&
                     seconds_between(q.quote_time, as_of) > options.stale_hours * kSecondsPerHour;
  return stale ? Reason::stale : Reason::none;
}

// Why the contract is not the ordinary one, Remark::none when it is.
Remark judge_contract(const Quote& q, const std::vector<double>& ordinary) {
  if (q.adjusted) return Remark::adjusted;
  const bool odd =
      q.underlying >= 0 && !std::isnan(q.multiplier) && q.multiplier != ordinary[q.underlying];
  return odd ? Remark::multiplier : Remark::none;
}

Reason judge_prices(const Quote& q, const CleanOptions& options) {
  if (!is_positive(q.bid)) return Reason::no_bid;
  if (!is_positive(q.ask)) return Reason::no_ask;
  if (q.bid > q.ask) return Reason::crossed;
  return q.ask - q.bid > options.widest * mid(q) ? Reason::wide : Reason::none;
}

// Identity of a contract in whole numbers. The bits of positive doubles sort like the
// doubles, and any bits at all have a total order, which keeps the sort defined.
struct ContractKey {
  std::int64_t expiry;
  std::uint64_t strike;
  std::uint32_t row;
  std::int32_t underlying;
  PutCall put_call;
  auto contract() const { return std::tie(underlying, expiry, strike, put_call); }
};

std::vector<ContractKey> sorted_contracts(const QuoteTable& table) {
  std::vector<ContractKey> keys;
  keys.reserve(table.quotes.size());
  for (std::uint32_t i = 0; i < table.quotes.size(); ++i) {
    const Quote& q = table.quotes[i];
    if (q.reason != Reason::none) continue;
    keys.push_back({q.expiry.time_since_epoch().count(), std::bit_cast<std::uint64_t>(q.strike), i,
                    q.underlying, q.put_call});
  }
  const auto before = [](const ContractKey& a, const ContractKey& b) {
    return a.contract() < b.contract();
  };
  // Many files come in this order already.
  if (!std::is_sorted(keys.begin(), keys.end(), before)) {
    std::sort(keys.begin(), keys.end(), before);
  }
  return keys;
}

// What makes one of several rows of a contract the one to keep: smaller is better.
struct Merit {
  std::int64_t age;  // minus the quote time; a row that states none is the oldest
  double spread;     // infinite unless both sides are firm and not crossed
  double minus_bid;
  double ask;
  std::int32_t file;
  std::int64_t line;
  auto order() const { return std::tie(age, spread, minus_bid, ask, file, line); }
};

Merit merit(const Quote& q) {
  constexpr double kInfinity = std::numeric_limits<double>::infinity();
  const bool sound = is_positive(q.bid) && is_positive(q.ask) && q.bid <= q.ask;
  const bool timed = q.quote_time != kNoInstant;
  return {
      timed ? -q.quote_time.time_since_epoch().count() : std::numeric_limits<std::int64_t>::max(),
      sound ? q.ask - q.bid : kInfinity,
      std::isnan(q.bid) ? kInfinity : -q.bid,
      std::isnan(q.ask) ? kInfinity : q.ask,
      q.file,
      q.line};
}

Remark why_kept(const Merit& kept, const Merit& other) {
  if (kept.age != other.age) return Remark::later;
  if (kept.spread != other.spread) return Remark::narrower;
  const bool differ = kept.minus_bid != other.minus_bid || kept.ask != other.ask;
  return differ ? Remark::better : Remark::same;
}

// Keeps the best of the rows of one contract and drops the others.
void drop_all_but_best(QuoteTable& table, std::span<const ContractKey> rows, Remarks& remarks) {
  const auto merit_of = [&](const ContractKey& key) { return merit(table.quotes[key.row]); };
  const auto best = std::min_element(rows.begin(), rows.end(), [&](const auto& a, const auto& b) {
    return merit_of(a).order() < merit_of(b).order();
  });
  const Merit kept = merit_of(*best);
  for (const ContractKey& key : rows) {
    if (key.row == best->row) continue;
    remarks.drop(table.quotes[key.row], Reason::duplicate, why_kept(kept, merit_of(key)));
  }
}

void drop_duplicates(QuoteTable& table, Remarks& remarks) {
  const std::vector<ContractKey> keys = sorted_contracts(table);
  for (auto run = keys.begin(); run != keys.end();) {
    const auto end = std::find_if(
        run, keys.end(), [&](const ContractKey& k) { return k.contract() != run->contract(); });
    if (end - run > 1) drop_all_but_best(table, {run, end}, remarks);
    run = end;
  }
}

}  // namespace

std::optional<std::string> CleanOptions::problem() const {
  if (!(shortest_hours >= 0)) {
    return fmt::format("shortest_hours = {}, must be at least 0", shortest_hours);
  }
  if (!(widest > 0)) return fmt::format("widest = {}, must be above 0", widest);
  if (!(stale_hours >= 0)) return fmt::format("stale_hours = {}, must be at least 0", stale_hours);
  return std::nullopt;
}

void clean_quotes(QuoteTable& table, Instant as_of, const CleanOptions& options) {
  Remarks remarks(table);
  const std::vector<double> ordinary = ordinary_multipliers(table);
  for (Quote& q : table.quotes) {
    if (q.reason != Reason::none) continue;
    q.reason = judge_time(q, as_of, options);
    if (q.reason != Reason::none) continue;
    const Remark remark = judge_contract(q, ordinary);
    if (remark != Remark::none) remarks.drop(q, Reason::non_standard, remark);
  }
  drop_duplicates(table, remarks);
  for (Quote& q : table.quotes) {
    if (q.reason == Reason::none) q.reason = judge_prices(q, options);
  }
}

}  // namespace duskgrid::quotes
