#include "night/carry.h"

#include <fmt/format.h>
#include <tbb/parallel_for_each.h>

#include <algorithm>
#include <cmath>

#include "arbitrage/certificate.h"
#include "market/dates.h"
#include "market/day_count.h"
#include "market/dividends.h"
#include "night/slice_market.h"
#include "surface/carry.h"

namespace duskgrid::night {
namespace {

using market::ForwardSource;
using publish::ForwardRow;
using surface::CarryRule;

// The night whose quotes are behind a surface that may itself have been carried.
quotes::AsOf origin_of(const publish::PastUnderlying& past) {
  const auto& own = past.stored->as_of;
  if (past.record.carried_from.empty()) return own;
  const auto origin = quotes::parse_as_of(past.record.carried_from, own.clock.zone);
  return origin ? *origin : own;
}

class Carrier {
 public:
  Carrier(MarkedUnderlying& marked, const publish::PastUnderlying& past, const NightConfig& config,
          const ResolvedNight& night)
      : out_(marked), past_(past), old_(past.stored->surface), config_(config), night_(night) {
    if (const auto found = config.underlyings.find(marked.record.name);
        found != config.underlyings.end())
      facts_ = found->second;
    spot_ = facts_.spot ? facts_.spot : marked.spot ? marked.spot : config.spot;
  }

  void run() {
    const auto origin = origin_of(past_);
    const int age = market::business_days(
        market::local_date(origin.instant, night_.as_of.clock),
        market::local_date(night_.as_of.instant, night_.as_of.clock), night_.holidays);
    const std::string from = quotes::format_instant(origin.clock, origin.instant);
    const std::string days = fmt::format("{} business day{} old", age, age == 1 ? "" : "s");
    const int most = config_.carry.most_business_days;
    if (age > most)
      return say(fmt::format("not carried: the surface of {} is {}, at most {} may stand in", from,
                             days, most));
    find_expiries();
    if (expiries_.empty()) return say("not carried: every expiry of " + from + " has passed");
    if (!put(CarryRule::remaining_time) && !put(CarryRule::own_expiry))
      return say("not carried: the surface of " + from +
                 " is not proved free of arbitrage tonight");
    say(fmt::format("carried from {}, {}{}", from, days,
                    rule_ == CarryRule::own_expiry ? ", at equal expiry" : ""));
    out_.record.status = publish::Status::carried;
    out_.record.carried_from = from;
    out_.record.certified = true;
    out_.record.slices = static_cast<std::int64_t>(out_.surface->slices.size());
    write_forwards();
    sample();
  }

 private:
  void say(const std::string& what) {
    auto& message = out_.record.message;
    message = what + (message.empty() ? "" : "; " + message);
  }

  // A forward that tonight's quotes or configuration give, whatever the spot says.
  const ForwardRow* row_of(quotes::Instant expiry) const {
    const auto found = std::find_if(out_.forwards.begin(), out_.forwards.end(),
                                    [&](const auto& row) { return row.expiry == expiry; });
    if (found == out_.forwards.end() || found->estimate.source == ForwardSource::curve)
      return nullptr;
    return &*found;
  }

  // As seen from an instant; a stated carry is the whole yield, dividends included.
  std::vector<market::Dividend> dividends_after(quotes::Instant instant) const {
    const auto dated = night_.dividends.find(out_.record.name);
    if (dated == night_.dividends.end() || facts_.carry) return {};
    return market::dividends_after(instant, dated->second);
  }

  // The yield on top of the dividends that the old surface's forward had, where dividends are
  // known: the ratio of its forwards would take off once more what has gone ex since.
  std::optional<double> old_borrow(const surface::Slice& old) const {
    const auto then = dividends_after(past_.stored->as_of.instant);
    if (then.empty() || !old_.spot) return std::nullopt;
    const double rate = -std::log(old.discount_factor) / old.year_fraction;
    return market::borrow_of(old.forward, {*old_.spot, rate, 0, old.year_fraction}, then);
  }

  // From tonight's spot, rate and dividends, where a borrow or carry is stated or the dividends are
  // known; else not above 0.
  double financed_forward(const surface::Slice& old, double rate, double t) const {
    const auto stated = facts_.borrow ? facts_.borrow : facts_.carry;
    const auto borrow = stated ? stated : old_borrow(old);
    if (!spot_ || !borrow) return 0;
    const double forward =
        market::forward_of({*spot_, rate, *borrow, t}, dividends_after(night_.as_of.instant));
    return std::isfinite(forward) ? forward : 0;
  }

  // Tonight's forward and discount factor of an old slice; see docs/methods.md, section 9.3.
  market::ForwardEstimate estimate(const surface::Slice& old, double t) const {
    if (const auto* row = row_of(old.expiry)) return row->estimate;
    const double passed = old.year_fraction - t;
    const surface::Carried then =
        passed > 0 ? surface::carried_at(old_, passed) : surface::Carried{0, 1};
    market::ForwardEstimate out{};
    out.discount_factor = night_.curve ? night_.curve->discount_factor(t)
                                       : old.discount_factor / then.discount_factor;
    out.zero_rate = -std::log(out.discount_factor) / t;
    out.lowest_forward = out.highest_forward = quotes::kAbsent;
    out.source = ForwardSource::carried;
    if (const auto stated = given_forward(facts_, night_, old.expiry)) {
      out.forward = *stated;
      out.source = ForwardSource::given;
    } else if (const double financed = financed_forward(old, out.zero_rate, t); financed > 0) {
      out.forward = financed;
      if (facts_.borrow || facts_.carry) out.source = ForwardSource::curve;
    } else {
      // Growth from the spot on; a forward is today's mean of itself where no spot is known.
      out.forward = spot_ && then.forward > 0 ? *spot_ * old.forward / then.forward : old.forward;
    }
    if (spot_) out.carry = out.zero_rate - std::log(out.forward / *spot_) / t;
    return out;
  }

  void find_expiries() {
    const double shortest = config_.clean.shortest_hours / (24.0 * 365.0);
    for (std::size_t i = 0; i < old_.slices.size(); ++i) {
      const auto& slice = old_.slices[i];
      const double t = market::year_fraction(night_.as_of.instant, slice.expiry);
      if (!(t > 0) || t < shortest) continue;
      const auto found = estimate(slice, t);
      expiries_.push_back({i, t, found.forward, found.discount_factor});
      estimates_.push_back({slice.expiry, t, found});
    }
  }

  // True where the surface so restated is proved free of arbitrage.
  bool put(CarryRule rule) {
    auto surface = surface::carry_surface(old_, expiries_, rule);
    if (!surface) return false;
    surface->spot = spot_;  // that of the old night is no spot of this one
    surface = arbitrage::with_proved_rules(std::move(*surface));
    if (!arbitrage::certify(*surface).certified) return false;
    out_.surface = std::move(surface);
    rule_ = rule;
    return true;
  }

  // Rows of tonight's own expiries stay, those of carried ones are what the surface has.
  void write_forwards() {
    for (const auto& row : estimates_) {
      std::erase_if(out_.forwards, [&](const auto& own) { return own.expiry == row.expiry; });
      out_.forwards.push_back(row);
    }
    std::sort(out_.forwards.begin(), out_.forwards.end(),
              [](const auto& a, const auto& b) { return a.expiry < b.expiry; });
  }

  void sample() {
    publish::GridInputs inputs{night_.as_of.instant, night_.as_of.clock, {}, {}, true};
    inputs.used_k.resize(out_.surface->slices.size());
    auto options = config_.grid;
    // Strikes listed on a night that is gone are not known: a usual spread of points instead.
    if (options.axis == publish::Axis::strike && options.points.empty())
      inputs.listed_strikes = usual_strikes();
    out_.grid = publish::sample_grid(*out_.surface, inputs, options);
  }

  std::vector<double> usual_strikes() const {
    std::vector<double> strikes;
    for (const double moneyness : publish::default_points(publish::Axis::moneyness))
      strikes.push_back(moneyness * out_.surface->slices.front().forward);
    return strikes;
  }

  MarkedUnderlying& out_;
  const publish::PastUnderlying& past_;
  const surface::Surface& old_;
  const NightConfig& config_;
  const ResolvedNight& night_;
  UnderlyingFacts facts_;
  std::optional<double> spot_;
  std::vector<surface::CarriedExpiry> expiries_;
  std::vector<ForwardRow> estimates_;  // of the same
  CarryRule rule_ = CarryRule::remaining_time;
};

}  // namespace

void carry(MarkedUnderlying& marked, const publish::PastUnderlying& past, const NightConfig& config,
           const ResolvedNight& night) {
  Carrier(marked, past, config, night).run();
}

void carry_all(std::vector<MarkedUnderlying>& marked, const publish::PastRun& previous,
               const NightConfig& config, const ResolvedNight& night) {
  if (config.carry.most_business_days == 0) return;
  const auto by_name = [](const MarkedUnderlying& m, const std::string& name) {
    return m.record.name < name;
  };
  std::vector<MarkedUnderlying> absent;
  for (const auto& [name, past] : previous.underlyings) {
    const auto at = std::lower_bound(marked.begin(), marked.end(), name, by_name);
    if (!past.stored || (at != marked.end() && at->record.name == name)) continue;
    MarkedUnderlying gone;
    gone.record.name = name;
    gone.record.message = "in no file";
    absent.push_back(std::move(gone));
  }
  marked.insert(marked.end(), std::make_move_iterator(absent.begin()),
                std::make_move_iterator(absent.end()));
  std::sort(marked.begin(), marked.end(),
            [](const auto& a, const auto& b) { return a.record.name < b.record.name; });
  tbb::parallel_for_each(marked.begin(), marked.end(), [&](MarkedUnderlying& m) {
    if (m.surface) return;
    const auto found = previous.underlyings.find(m.record.name);
    if (found != previous.underlyings.end() && found->second.stored)
      carry(m, found->second, config, night);
  });
}

}  // namespace duskgrid::night
