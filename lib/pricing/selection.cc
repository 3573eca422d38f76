#include "pricing/selection.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>
#include <vector>

#include "pricing/invert_batch.h"

namespace duskgrid::pricing {
namespace {

using quotes::PutCall;
using quotes::Quote;
using quotes::QuotedIn;
using quotes::Reason;

BlackTerms terms_of(const Quote& q, const SliceMarket& m) {
  return {q.put_call, m.forward, q.strike, m.discount_factor};
}

// Prices of a slice waiting to be inverted in one call, and where their vols go.
class PendingVols {
 public:
  void add(const Quote& q, double price, double& vol) {
    strikes_.push_back(q.strike);
    put_calls_.push_back(q.put_call);
    prices_.push_back(price);
    places_.push_back(&vol);
    bids_.push_back(&vol == &q.vol_bid);
  }

  // A bid at or below intrinsic has vol 0; an ask or a mid there, or past the bound, has none.
  void invert(const SliceMarket& m) {
    std::vector<double> vols(prices_.size());
    std::vector<VolStatus> statuses(prices_.size());
    implied_vols({m.forward, m.discount_factor, m.year_fraction}, {strikes_, put_calls_, prices_},
                 vols, statuses);
    for (std::size_t i = 0; i < vols.size(); ++i) {
      const bool some =
          statuses[i] == VolStatus::ok || (statuses[i] == VolStatus::below_intrinsic && bids_[i]);
      *places_[i] = some ? vols[i] : quotes::kAbsent;
    }
  }

 private:
  std::vector<double> strikes_, prices_;
  std::vector<PutCall> put_calls_;
  std::vector<double*> places_;
  std::vector<bool> bids_;
};

// A side whose early exercise is accounted for; else it is taken as European.
bool exercised(const EquivalentSide* side) {
  return side != nullptr && side->status != AmericanVolStatus::not_finite &&
         side->status != AmericanVolStatus::two_boundaries;
}

// The volatility of one side of a quote, or of its mid: `quoted` where it is one, or waiting to be
// found from its price. A bid not above what exercise pays has 0, a mid or an ask there has none.
void fill_vol(const Quote& q, double quoted, const EquivalentSide* side, double& vol,
              PendingVols& pending) {
  if (q.quoted_in == QuotedIn::vol)
    vol = quoted;
  else if (!exercised(side))
    pending.add(q, quoted, vol);
  else if (side->status == AmericanVolStatus::ok && std::isfinite(side->vol))
    vol = side->vol;
  else if (side->status == AmericanVolStatus::ok)
    pending.add(q, side->price, vol);
  else if (&vol == &q.vol_bid && (side->status == AmericanVolStatus::below_intrinsic ||
                                  side->status == AmericanVolStatus::immediate_exercise))
    vol = 0;
}

void fill_vols(Quote& q, const EquivalentQuote* equivalent, PendingVols& pending) {
  const auto side = [&](EquivalentSide EquivalentQuote::*which) {
    return equivalent == nullptr ? nullptr : &(equivalent->*which);
  };
  if (firm(q.bid))
    fill_vol(q, q.bid, side(&EquivalentQuote::bid), q.vol_bid, pending);
  else if (std::isfinite(q.bid))
    q.vol_bid = 0;
  if (firm(q.ask)) fill_vol(q, q.ask, side(&EquivalentQuote::ask), q.vol_ask, pending);
  if (firm(q.bid) && firm(q.ask))
    fill_vol(q, quotes::mid(q), side(&EquivalentQuote::mid), q.vol_mid, pending);
}

void judge_bounds(Quote& q, const SliceMarket& m) {
  if (q.reason != Reason::none || q.quoted_in == QuotedIn::vol) return;
  const BlackTerms terms = terms_of(q, m);
  // An ask out there has no volatility either.
  if (q.bid >= upper_bound(terms) || q.ask >= upper_bound(terms))
    q.reason = Reason::above_bound;
  else if (q.ask <= discounted_intrinsic(terms))
    q.reason = Reason::below_intrinsic;
}

void judge_exercise(Quote& q, const EquivalentQuote& equivalent) {
  if (q.reason != Reason::none) return;
  const auto bid = equivalent.bid.status, mid = equivalent.mid.status, ask = equivalent.ask.status;
  if (bid == AmericanVolStatus::above_bound || ask == AmericanVolStatus::above_bound)
    q.reason = Reason::above_bound;
  else if (ask == AmericanVolStatus::below_intrinsic)
    q.reason = Reason::below_intrinsic;
  else if (mid == AmericanVolStatus::not_converged || ask == AmericanVolStatus::not_converged)
    q.reason = Reason::no_vol;
  else if (mid != AmericanVolStatus::ok || ask != AmericanVolStatus::ok)
    q.reason = Reason::immediate_exercise;
}

bool out_of_the_money(const Quote& q, double forward) {
  return q.put_call == PutCall::call ? q.strike >= forward : q.strike < forward;
}

// Two-sided with both vols there: something a fit can aim at.
bool attainable(const Quote& q) {
  return q.reason == Reason::none && q.vol_mid > 0 && std::isfinite(q.vol_mid) &&
         std::isfinite(q.vol_ask) && q.vol_ask > 0;
}

double log_moneyness(const Quote& q, const SliceMarket& m) {
  return -log_moneyness_of_forward(m.forward, q.strike);
}

class SliceSelection {
 public:
  SliceSelection(quotes::QuoteTable& table, const quotes::ChainSlice& slice, const SliceMarket& m)
      : table_(table), rows_(slice.rows), market_(m) {}

  Quote& at(std::size_t i) { return table_.quotes[rows_[i]]; }

  // Rows come by strike, call before put: a strike has one or two, and more where dropped rows
  // repeat it.
  void choose_sides() {
    for (std::size_t i = 0; i < rows_.size();) {
      std::size_t end = i + 1;
      while (end < rows_.size() && at(end).strike == at(i).strike) ++end;
      choose_side(i, end);
      i = end;
    }
  }

  void judge_far_wings(double far_deviations) {
    const auto used = used_rows();
    if (used.empty()) return;
    const auto nearest = *std::min_element(used.begin(), used.end(), [&](auto a, auto b) {
      return std::abs(k_of(a)) < std::abs(k_of(b));
    });
    const double reach = far_deviations * at(nearest).vol_mid * std::sqrt(market_.year_fraction) +
                         std::abs(k_of(nearest));
    for (const auto i : used)
      if (std::abs(k_of(i)) > reach) at(i).reason = Reason::far_wing;
  }

  // The worst first, its neighbours judged again without it, never more than a tenth of the slice.
  void judge_outliers(double limit) {
    constexpr std::size_t kFewest = 6;
    auto used = used_rows();
    const std::size_t most = used.size() / 10;
    for (std::size_t found = 0; found < most && used.size() >= kFewest; ++found) {
      const auto worst = worst_outlier(used);
      if (worst.ratio <= limit) return;
      at(used[worst.position]).reason = Reason::outlier;
      used.erase(used.begin() + static_cast<std::ptrdiff_t>(worst.position));
    }
  }

  void thin(std::size_t most) {
    const auto used = used_rows();
    if (most == 0 || used.size() <= most) return;
    std::vector<bool> kept(used.size(), false);
    for (std::size_t j = 0; j < most; ++j)
      kept[most == 1 ? used.size() / 2 : j * (used.size() - 1) / (most - 1)] = true;
    for (std::size_t j = 0; j < used.size(); ++j)
      if (!kept[j]) at(used[j]).reason = Reason::thinned;
  }

 private:
  struct Outlier {
    std::size_t position;
    double ratio;
  };

  double k_of(std::size_t i) { return log_moneyness(at(i), market_); }

  std::vector<std::size_t> used_rows() {
    std::vector<std::size_t> used;
    for (std::size_t i = 0; i < rows_.size(); ++i)
      if (attainable(at(i))) used.push_back(i);
    return used;
  }

  void choose_side(std::size_t begin, std::size_t end) {
    const auto carries = [&](std::size_t i) {
      const Quote& q = at(i);
      return attainable(q) && (out_of_the_money(q, market_.forward) || q.vol_bid > 0);
    };
    std::size_t chosen = end;
    for (std::size_t i = begin; i < end; ++i)
      if (carries(i) && (chosen == end || out_of_the_money(at(i), market_.forward))) chosen = i;
    for (std::size_t i = begin; i < end; ++i)
      if (i != chosen && at(i).reason == Reason::none) at(i).reason = Reason::in_the_money;
  }

  static double half_spread(const Quote& q) { return 0.5 * (q.vol_ask - q.vol_bid); }

  // How far position j lies from the line through positions a and b, in half-spreads of all three.
  double ratio_to_line(const std::vector<std::size_t>& used, std::size_t a, std::size_t j,
                       std::size_t b) {
    const double ka = k_of(used[a]), kj = k_of(used[j]), kb = k_of(used[b]);
    const double weight = (kj - ka) / (kb - ka);
    const Quote &qa = at(used[a]), &qj = at(used[j]), &qb = at(used[b]);
    const double line = qa.vol_mid + weight * (qb.vol_mid - qa.vol_mid);
    // A line misses a smile's bend by a few percent of its level: not the quote's fault.
    constexpr double kBend = 0.02;
    const double outside = std::abs(qj.vol_mid - line) - kBend * std::abs(line);
    // Locked quotes have no spread to measure by: half a percent of the level stands in.
    constexpr double kLeast = 0.005;
    const double spreads = half_spread(qj) + std::max(half_spread(qa), half_spread(qb));
    return outside / std::max(spreads, kLeast * std::abs(line));
  }

  // An outlier is one for each of three lines: its two neighbours', and each neighbour's with the
  // next beyond the other. A point beside an outlier is one for two of them at most.
  Outlier worst_outlier(const std::vector<std::size_t>& used) {
    Outlier worst{0, 0};
    for (std::size_t j = 2; j + 2 < used.size(); ++j) {
      const double ratio =
          std::min({ratio_to_line(used, j - 1, j, j + 1), ratio_to_line(used, j - 2, j, j + 1),
                    ratio_to_line(used, j - 1, j, j + 2), ratio_to_line(used, j - 2, j, j + 2)});
      if (ratio > worst.ratio) worst = {j, ratio};
    }
    return worst;
  }

  quotes::QuoteTable& table_;
  const std::vector<std::uint32_t>& rows_;
  SliceMarket market_;
};

}  // namespace

std::optional<std::string> SelectionOptions::problem() const {
  if (!(far_deviations > 0)) return fmt::format("far_deviations = {}, must be > 0", far_deviations);
  if (most_quotes < 0) return fmt::format("most_quotes = {}, must be >= 0", most_quotes);
  if (!(outlier_half_spreads >= 0))
    return fmt::format("outlier_half_spreads = {}, must be >= 0", outlier_half_spreads);
  return std::nullopt;
}

void select_quotes(quotes::QuoteTable& table, const quotes::ChainSlice& slice,
                   const SliceMarket& market, const SelectionOptions& options,
                   std::span<const EquivalentQuote> equivalents) {
  const auto equivalent_of = [&](std::size_t i) {
    return equivalents.empty() ? nullptr : &equivalents[i];
  };
  PendingVols pending;
  for (std::size_t i = 0; i < slice.rows.size(); ++i)
    fill_vols(table.quotes[slice.rows[i]], equivalent_of(i), pending);
  pending.invert(market);
  for (std::size_t i = 0; i < slice.rows.size(); ++i) {
    Quote& q = table.quotes[slice.rows[i]];
    const auto* equivalent = equivalent_of(i);
    if (equivalent != nullptr && exercised(&equivalent->ask))
      judge_exercise(q, *equivalent);
    else
      judge_bounds(q, market);
  }
  SliceSelection selection(table, slice, market);
  selection.choose_sides();
  selection.judge_far_wings(options.far_deviations);
  if (options.outlier_half_spreads > 0) selection.judge_outliers(options.outlier_half_spreads);
  selection.thin(static_cast<std::size_t>(options.most_quotes));
}

}  // namespace duskgrid::pricing
