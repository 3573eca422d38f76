#include "night/mark.h"

#include <fmt/format.h>

#include <algorithm>
#include <cmath>

#include "arbitrage/certificate.h"
#include "arbitrage/quote_checks.h"
#include "arbitrage/surface_checks.h"
#include "night/expiries.h"
#include "night/slice_market.h"
#include "pricing/black.h"

namespace duskgrid::night {
namespace {

using quotes::PutCall;
using quotes::Quote;
using quotes::QuotedIn;
using quotes::Reason;

// Firm sides count toward arbitrage in the quotes whatever else is wrong with a quote, but for
// crossed, stale, odd or misread ones. An outlier is where arbitrage shows first.
bool firm_reason(Reason reason) {
  switch (reason) {
    case Reason::expired:
    case Reason::too_short:
    case Reason::crossed:
    case Reason::duplicate:
    case Reason::stale:
    case Reason::non_standard:
    case Reason::unreadable: return false;
    default: return true;
  }
}

// "1 arbitrage", "2 arbitrages".
std::string counted(std::size_t n, const char* what) {
  return fmt::format("{} {}{}", n, what, n == 1 ? "" : "s");
}

class Marker {
 public:
  Marker(quotes::QuoteTable& table, const quotes::Chain& chain, const NightConfig& config,
         const ResolvedNight& night)
      : table_(table), chain_(chain), config_(config), night_(night) {
    out_.record.name = table.underlyings[chain.underlying];
    if (const auto found = config.underlyings.find(out_.record.name);
        found != config.underlyings.end())
      facts_ = found->second;
  }

  MarkedUnderlying run() {
    flag_later_quotes();
    state_exercise();
    find_forwards();
    select();
    fit();
    judge_fit();
    check_the_quotes();
    if (out_.surface) sample();
    conclude();
    out_.spot = spot_;
    out_.expiries = expiry_rows(table_, chain_, out_.quality);
    return std::move(out_);
  }

 private:
  Quote& quote(std::uint32_t row) { return table_.quotes[row]; }

  // A night has quotes of its own evening. Later ones mean that the as-of is wrong, or the file.
  void flag_later_quotes() {
    constexpr auto kGrace = std::chrono::hours{1};
    std::size_t later = 0;
    for (const auto& slice : chain_.slices)
      for (const auto row : slice.rows)
        if (quote(row).quote_time != quotes::kNoInstant &&
            quote(row).quote_time > night_.as_of.instant + kGrace)
          ++later;
    if (later > 0) flag(fmt::format("{} timed after the as-of", counted(later, "quote")));
  }

  // What the configuration says of the underlying goes over what its file says.
  void state_exercise() {
    if (!facts_.exercise) return;
    for (const auto& slice : chain_.slices)
      for (const auto row : slice.rows) quote(row).exercise = *facts_.exercise;
  }

  void find_forwards() {
    auto market = find_market(table_, chain_, config_, night_);
    spot_ = market.spot;
    if (market.spot_origin == publish::Origin::inferred)
      flag("american without a spot, taken from the first forward");
    slices_ = std::move(market.slices);
    for (const auto& s : slices_) {
      if (s.forward) out_.forwards.push_back({s.rows->expiry, s.year_fraction, *s.forward});
      out_.financing.push_back(s.financing);
    }
  }

  void select() {
    for (const auto& s : slices_) {
      if (!s.forward) {
        for (const auto row : s.rows->rows)
          if (quote(row).reason == Reason::none) quote(row).reason = Reason::no_forward;
        continue;
      }
      std::vector<pricing::EquivalentQuote> equivalents;
      if (s.exercise)
        equivalents = pricing::european_equivalents(night_.american, *s.exercise, table_, *s.rows);
      if (std::any_of(equivalents.begin(), equivalents.end(), [](const auto& e) {
            return e.ask.status == pricing::AmericanVolStatus::two_boundaries;
          }))
        ++two_boundaries_;
      pricing::select_quotes(table_, *s.rows,
                             {s.year_fraction, s.forward->forward, s.forward->discount_factor},
                             config_.selection, equivalents);
    }
  }

  double k_of(const Quote& q, const OpenSlice& s) const {
    return -pricing::log_moneyness_of_forward(s.forward->forward, q.strike);
  }

  void fit() {
    surface::Surface surface{out_.record.name, spot_, {}};
    std::vector<surface::FitSlice> targets;
    for (const auto& s : slices_) {
      surface::FitSlice target{s.year_fraction, {}};
      if (s.forward)
        for (const auto row : s.rows->rows)
          if (const Quote& q = quote(row); q.reason == Reason::none)
            target.quotes.push_back(
                {k_of(q, s), q.vol_mid, 0.5 * (q.vol_ask - q.vol_bid), q.vol_bid, q.vol_ask});
      if (target.quotes.empty()) continue;
      const auto [low, high] =
          std::minmax_element(target.quotes.begin(), target.quotes.end(),
                              [](const auto& a, const auto& b) { return a.k < b.k; });
      surface.slices.push_back({s.rows->expiry,
                                s.year_fraction,
                                s.forward->forward,
                                s.forward->discount_factor,
                                {},
                                low->k,
                                high->k});
      fitted_.push_back(&s);
      targets.push_back(std::move(target));
    }
    if (targets.empty()) return;
    surface::FitOptions options{config_.backbone, config_.overlay};
    fit_and_prove(targets, options, surface);
    if (out_.surface && !out_.record.certified && options.overlay.most_coefficients > 0) {
      // The backbone alone meets fewer quotes, but is free of arbitrage by construction.
      options.overlay.most_coefficients = 0;
      fit_and_prove(targets, options, surface);
      flag("overlay given up, not proved free of arbitrage");
    }
    if (out_.surface && !out_.record.certified) report_unproved();
  }

  void fit_and_prove(const std::vector<surface::FitSlice>& targets,
                     const surface::FitOptions& options, surface::Surface surface) {
    const auto fit = surface::fit_surface(targets, options);
    if (!fit) {
      flag("fit failed: " + fit.failure().text());
      return;
    }
    for (std::size_t i = 0; i < targets.size(); ++i) {
      surface.slices[i].backbone = fit->slices[i].backbone;
      surface.slices[i].overlay = fit->slices[i].overlay;
    }
    if (fit->backbone_end == surface::FitEnd::stopped_early) flag("fit stopped early");
    constexpr int kMostHumps = 2;  // one, or two around an event
    const auto humped = std::count_if(fit->slices.begin(), fit->slices.end(),
                                      [](const auto& s) { return s.humps > kMostHumps; });
    if (humped > 0)
      flag(fmt::format("density with over {} humps: {} of {} expiries", kMostHumps, humped,
                       fit->slices.size()));
    out_.surface = arbitrage::with_proved_rules(std::move(surface));
    certificate_ = arbitrage::certify(*out_.surface);
    out_.record.certified = certificate_.certified;
  }

  void report_unproved() {
    const auto found = arbitrage::violations_of(*out_.surface, certificate_);
    flag(found.empty() ? "not proved free of arbitrage"
                       : counted(found.size(), "arbitrage") + " in the surface");
    out_.violations.insert(out_.violations.end(), found.begin(), found.end());
  }

  // vol_fit of every quote of a fitted expiry, and how far used ones are missed.
  void judge_fit() {
    if (!out_.surface) return;
    std::int64_t missed = 0;
    for (std::size_t i = 0; i < fitted_.size(); ++i) {
      const auto& slice = out_.surface->slices[i];
      SliceQuality quality{slice.expiry, 0, 0, 0};
      for (const auto row : fitted_[i]->rows->rows) {
        Quote& q = quote(row);
        const double k = k_of(q, *fitted_[i]);
        q.vol_fit = std::sqrt(surface::smile_of(slice, k).w / slice.year_fraction);
        if (!std::isfinite(q.vol_fit)) q.vol_fit = quotes::kAbsent;
        if (q.reason != Reason::none) continue;
        q.miss = miss_of(q);
        ++quality.used;
        if (q.miss == 0) ++quality.inside;
        if (std::abs(q.miss) > 1) ++missed;
        quality.rms_vol += (q.vol_fit - q.vol_mid) * (q.vol_fit - q.vol_mid);
      }
      quality.rms_vol = std::sqrt(quality.rms_vol / static_cast<double>(quality.used));
      out_.record.used += quality.used;
      out_.record.inside += quality.inside;
      out_.quality.push_back(quality);
    }
    if (static_cast<double>(missed) >
        config_.flags.most_missed * static_cast<double>(out_.record.used))
      flag(fmt::format("{} of {} used quotes missed by over a half-spread", missed,
                       out_.record.used));
  }

  static double miss_of(const Quote& q) {
    constexpr double kLeastHalfSpread = 1e-6;
    const double half = std::max(0.5 * (q.vol_ask - q.vol_bid), kLeastHalfSpread);
    if (q.vol_fit > q.vol_ask) return (q.vol_fit - q.vol_ask) / half;
    if (q.vol_fit < q.vol_bid) return (q.vol_fit - q.vol_bid) / half;
    return 0;
  }

  // A firm side as a price; NaN where there is none.
  static double firm_price(const Quote& q, double side, const OpenSlice& s) {
    if (!std::isfinite(side) || !(side > 0)) return quotes::kAbsent;
    if (q.quoted_in == QuotedIn::price) return side;
    return pricing::black_price(
        {q.put_call, s.forward->forward, q.strike, s.forward->discount_factor},
        side * std::sqrt(s.year_fraction));
  }

  std::vector<arbitrage::QuotedStrike> firm_strikes(const OpenSlice& s) {
    std::vector<arbitrage::QuotedStrike> strikes;
    for (const auto row : s.rows->rows) {
      const Quote& q = quote(row);
      if (!firm_reason(q.reason)) continue;
      if (strikes.empty() || strikes.back().strike != q.strike)
        strikes.push_back(
            {q.strike, quotes::kAbsent, quotes::kAbsent, quotes::kAbsent, quotes::kAbsent});
      auto& strike = strikes.back();
      const bool call = q.put_call == PutCall::call;
      (call ? strike.call_bid : strike.put_bid) = firm_price(q, q.bid, s);
      (call ? strike.call_ask : strike.put_ask) = firm_price(q, q.ask, s);
    }
    return strikes;
  }

  void check_the_quotes() {
    std::vector<arbitrage::QuotedSlice> firm;
    for (const auto& s : slices_)
      if (s.forward)
        firm.push_back({s.rows->expiry, s.year_fraction, s.forward->forward,
                        s.forward->discount_factor, s.american, firm_strikes(s)});
    auto found = arbitrage::check_quotes(firm);
    if (!found.empty())
      flag(fmt::format("{} among the quotes", counted(found.size(), "arbitrage")));
    out_.violations.insert(out_.violations.begin(), std::make_move_iterator(found.begin()),
                           std::make_move_iterator(found.end()));
  }

  void sample() {
    publish::GridInputs inputs{night_.as_of.instant, night_.as_of.clock, {}, {}, false};
    for (std::size_t i = 0; i < fitted_.size(); ++i) {
      inputs.used_k.emplace_back();
      for (const auto row : fitted_[i]->rows->rows) {
        const Quote& q = quote(row);
        inputs.listed_strikes.push_back(q.strike);
        if (q.reason == Reason::none) inputs.used_k.back().push_back(k_of(q, *fitted_[i]));
      }
    }
    auto& strikes = inputs.listed_strikes;
    std::sort(strikes.begin(), strikes.end());
    strikes.erase(std::unique(strikes.begin(), strikes.end()), strikes.end());
    out_.grid = publish::sample_grid(*out_.surface, inputs, config_.grid);
  }

  void flag(const std::string& what) {
    if (!out_.record.message.empty()) out_.record.message += "; ";
    out_.record.message += what;
  }

  void flag_expiries(const char* what, auto counts) {
    const auto n = std::count_if(slices_.begin(), slices_.end(), counts);
    if (n > 0) flag(fmt::format("{}: {} of {} expiries", what, n, slices_.size()));
  }

  // What stopped the quotes of an underlying that has no surface.
  std::string why_refused() {
    quotes::LedgerCounts counts;
    for (const auto& slice : chain_.slices)
      for (const auto row : slice.rows) counts.add(quote(row).reason);
    std::string list;
    for (const auto& entry : quotes::reasons())
      if (const auto n = counts.by_reason[static_cast<std::size_t>(entry.reason)];
          n > 0 && entry.reason != Reason::none)
        list += fmt::format("{}{} {}", list.empty() ? "" : ", ", entry.word, n);
    // Those are in no slice.
    if (const auto n = chain_.read - counts.read; n > 0)
      list += fmt::format("{}unreadable or duplicate {}", list.empty() ? "" : ", ", n);
    return "no usable quote" + (list.empty() ? list : ": " + list);
  }

  // Single quotes are stale; a good part of an expiry is told by a wrong spot or forward.
  bool beyond_reason(const OpenSlice& s) {
    constexpr std::size_t kFew = 3, kPart = 5;
    std::size_t sound = 0, beyond = 0;
    for (const auto row : s.rows->rows) {
      const Reason reason = quote(row).reason;
      const bool out = reason == Reason::below_intrinsic || reason == Reason::above_bound;
      beyond += out;
      sound += out || quotes::state_of(reason) != quotes::State::dropped;
    }
    return beyond >= kFew && kPart * beyond > sound;
  }

  void conclude() {
    auto& record = out_.record;
    record.violations = static_cast<std::int64_t>(out_.violations.size());
    if (!out_.surface) {
      record.status = publish::Status::refused;
      if (fitted_.empty()) record.message = why_refused();
      return;
    }
    record.slices = static_cast<std::int64_t>(out_.surface->slices.size());
    flag_expiries("no forward", [](const OpenSlice& s) { return !s.forward; });
    flag_expiries("no usable quote", [&](const OpenSlice& s) {
      return s.forward && std::find(fitted_.begin(), fitted_.end(), &s) == fitted_.end();
    });
    flag_expiries("call-put parity broken near the money",
                  [](const OpenSlice& s) { return s.forward && s.forward->breaks > 0; });
    flag_expiries("many quotes below intrinsic or above every price, is spot or forward right",
                  [&](const OpenSlice& s) { return s.forward && beyond_reason(s); });
    flag_expiries("american fitted as european", [](const OpenSlice& s) {
      return s.forward && s.financing.exercise == publish::ExerciseTaken::american_as_european;
    });
    flag_expiries("forward not settled with early exercise",
                  [](const OpenSlice& s) { return !s.settled; });
    if (two_boundaries_ > 0)
      flag(fmt::format("some taken as european, exercise between two boundaries: {} of {} expiries",
                       two_boundaries_, slices_.size()));
    flag_expiries("no rates given and none to be read off the quotes, taken as 0",
                  [](const OpenSlice& s) {
                    return s.forward && s.financing.rate_origin == publish::Origin::assumed;
                  });
    // Early exercise hides the rate in the quotes, so it has to be given.
    flag_expiries("american without rates, discounted as the european expiries are",
                  [](const OpenSlice& s) {
                    return s.american && s.financing.rate_origin == publish::Origin::inferred;
                  });
    record.status = record.message.empty() ? publish::Status::published : publish::Status::flagged;
  }

  quotes::QuoteTable& table_;
  const quotes::Chain& chain_;
  const NightConfig& config_;
  const ResolvedNight& night_;
  UnderlyingFacts facts_;
  std::optional<double> spot_;
  std::vector<OpenSlice> slices_;
  std::vector<const OpenSlice*> fitted_;  // those in the surface, in its order
  int two_boundaries_ = 0;                // expiries with quotes whose exercise is of that kind
  arbitrage::Certificate certificate_{false, {}, 0};
  MarkedUnderlying out_;
};

}  // namespace

MarkedUnderlying mark_underlying(quotes::QuoteTable& table, const quotes::Chain& chain,
                                 const NightConfig& config, const ResolvedNight& night) {
  return Marker(table, chain, config, night).run();
}

}  // namespace duskgrid::night
