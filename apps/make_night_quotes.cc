#include "make_night_quotes.h"

#include <algorithm>
#include <cmath>

namespace duskgrid::make_night {
namespace {

Cents tick_at(const Ticks& ticks, double cents) {
  return cents < static_cast<double>(ticks.change) ? ticks.below : ticks.above;
}

Cents down_to_tick(double cents, const Ticks& ticks) {
  if (cents <= 0) return 0;
  const Cents tick = tick_at(ticks, cents);
  return tick * static_cast<Cents>(std::floor(cents / static_cast<double>(tick)));
}

Cents up_to_tick(double cents, const Ticks& ticks) {
  const Cents tick = tick_at(ticks, cents);
  return tick * static_cast<Cents>(std::ceil(cents / static_cast<double>(tick)));
}

std::vector<Cents> strikes_of(const StrikeRule& rule, const Terms& terms) {
  const double lowest = 100 * terms.forward * std::exp(-rule.down * terms.deviation);
  const double highest = 100 * terms.forward * std::exp(rule.up * terms.deviation);
  std::vector<Cents> strikes;
  for (const Cents step : rule.steps) {
    strikes.clear();
    const auto width = static_cast<double>(step);
    for (Cents k = step * static_cast<Cents>(std::ceil(lowest / width));
         static_cast<double>(k) <= highest; k += step) {
      strikes.push_back(k);
    }
    if (strikes.size() <= rule.most) break;
  }
  return strikes;
}

void trade(MadeQuote& quote, double distance, std::int64_t now, Stream& random) {
  const double interest = 1 / (1 + distance * distance);
  const double luck = random.uniform();
  quote.bid_size = quote.bid.value_or(0) > 0 ? random.between(1, 60) : 0;
  quote.ask_size = random.between(1, 80);
  quote.volume = static_cast<std::int64_t>(900 * interest * luck * luck * luck);
  // One draw a statement: C++ leaves open which operand of a sum is drawn first.
  quote.open_interest = quote.volume * random.between(2, 9);
  quote.open_interest += random.between(0, 40);
  quote.quoted = now - random.between(1, 1200);
}

}  // namespace

void quote_price(MadeQuote& quote, double price, double distance, const SpreadRule& rule,
                 Stream& random) {
  const double half = (rule.base + rule.of_price * price) *
                      (1 + rule.of_distance * std::fabs(distance)) * (0.8 + 0.4 * random.uniform());
  const double middle = price + 0.4 * half * random.triangular();
  quote.bid = down_to_tick(100 * (middle - half), rule.ticks);
  quote.ask = up_to_tick(100 * (middle + half), rule.ticks);
}

void quote_vol(MadeQuote& quote, double vol, double distance, Stream& random) {
  const double half = 0.004 * (1 + 0.4 * std::fabs(distance)) * (0.8 + 0.4 * random.uniform());
  const double middle = vol + 0.4 * half * random.triangular();
  const Ticks ticks{5, 5, 0};
  quote.bid = down_to_tick(1e4 * (middle - half), ticks);
  quote.ask = up_to_tick(1e4 * (middle + half), ticks);
}

std::vector<MadeQuote> make_chain(const World& world, const ChainPlan& plan, QuotedIn unit) {
  Stream random(world.seed, plan.name.code);
  std::vector<Expiry> expiries = plan.expiries;
  // Two calendar rules can name one day, depending on the as-of.
  std::sort(expiries.begin(), expiries.end());
  expiries.erase(std::unique(expiries.begin(), expiries.end()), expiries.end());
  std::erase_if(expiries,
                [&](const Expiry& expiry) { return !(year_fraction(world.as_of, expiry) > 0); });

  std::vector<MadeQuote> quotes;
  for (const Expiry& expiry : expiries) {
    const Terms terms = terms_of(world.as_of, world.rates, plan.name, expiry);
    for (const Cents strike : strikes_of(plan.strikes, terms)) {
      const double k = static_cast<double>(strike) / 100;
      const double log_moneyness = std::log(k / terms.forward);
      const double w = total_variance(plan.name.smile, terms.t, log_moneyness);
      const double distance = log_moneyness / terms.deviation;
      for (const Side side : {Side::call, Side::put}) {
        if (unit == QuotedIn::vol && (side == Side::call) != (k >= terms.forward)) continue;
        MadeQuote quote;
        quote.underlying = plan.name.code;
        quote.expiry = expiry;
        quote.strike = strike;
        quote.side = side;
        quote.spot = plan.name.spot;
        quote.forward = terms.forward;
        if (unit == QuotedIn::vol) {
          quote_vol(quote, std::sqrt(w / terms.t), distance, random);
        } else {
          quote_price(quote, black(side, terms, k, w), distance, plan.spread, random);
        }
        trade(quote, distance, unix_seconds(world.as_of), random);
        quotes.push_back(quote);
      }
    }
  }
  return quotes;
}

std::vector<std::size_t> out_of_the_money(const std::vector<MadeQuote>& quotes,
                                          const std::string& underlying, const Date& expiry,
                                          Side side) {
  std::vector<std::size_t> found;
  for (std::size_t i = 0; i < quotes.size(); ++i) {
    const MadeQuote& q = quotes[i];
    const bool out = (static_cast<double>(q.strike) / 100 >= q.forward) == (side == Side::call);
    if (q.underlying == underlying && q.expiry.date == expiry && q.side == side && out &&
        !q.fault && q.bid.value_or(0) > 0) {
      found.push_back(i);
    }
  }
  if (side == Side::put) std::reverse(found.begin(), found.end());
  return found;
}

}  // namespace duskgrid::make_night
