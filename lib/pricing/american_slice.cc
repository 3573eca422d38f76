#include "pricing/american_slice.h"

namespace duskgrid::pricing {
namespace {

using quotes::Exercise;
using quotes::Quote;
using quotes::QuotedIn;

// Prices waiting to be inverted in one call, and where the answers go.
class PendingSides {
 public:
  void add(const Quote& q, double price, EquivalentSide& side) {
    strikes_.push_back(q.strike);
    put_calls_.push_back(q.put_call);
    prices_.push_back(price);
    places_.push_back(&side);
  }

  void invert(const DividendInverter& inverter, const ExerciseTerms& terms) {
    const std::size_t n = prices_.size();
    if (n == 0) return;
    std::vector<double> vols(n), europeans(n);
    std::vector<AmericanVolStatus> statuses(n);
    invert_american(inverter, terms, {strikes_, put_calls_, prices_}, {vols, europeans, statuses});
    const bool same_model =
        market::count_before(terms.dividends, terms.financing.year_fraction) == 0;
    for (std::size_t i = 0; i < n; ++i) {
      const bool ok = statuses[i] == AmericanVolStatus::ok;
      *places_[i] = {statuses[i], ok ? europeans[i] : quotes::kAbsent,
                     ok && same_model ? vols[i] : quotes::kAbsent};
    }
  }

 private:
  std::vector<double> strikes_, prices_;
  std::vector<quotes::PutCall> put_calls_;
  std::vector<EquivalentSide*> places_;
};

}  // namespace

void invert_american(const DividendInverter& inverter, const ExerciseTerms& terms,
                     const PriceColumns& columns, const AmericanVolColumns& out) {
  const auto& f = terms.financing;
  inverter.invert({{f.spot, f.rate, f.borrow, f.year_fraction}, terms.dividends}, columns, out);
}

std::vector<EquivalentQuote> european_equivalents(const DividendInverter& inverter,
                                                  const ExerciseTerms& terms,
                                                  const quotes::QuoteTable& table,
                                                  const quotes::ChainSlice& slice) {
  std::vector<EquivalentQuote> out(slice.rows.size());
  PendingSides pending;
  for (std::size_t i = 0; i < out.size(); ++i) {
    const Quote& q = table.quotes[slice.rows[i]];
    if (q.exercise != Exercise::american || q.quoted_in != QuotedIn::price) continue;
    if (firm(q.bid)) pending.add(q, q.bid, out[i].bid);
    if (firm(q.ask)) pending.add(q, q.ask, out[i].ask);
    if (firm(q.bid) && firm(q.ask)) pending.add(q, quotes::mid(q), out[i].mid);
  }
  pending.invert(inverter, terms);
  return out;
}

}  // namespace duskgrid::pricing
