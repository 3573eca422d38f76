#include "night/report_pages.h"

#include <fmt/format.h>
#include <tbb/parallel_for.h>

#include <algorithm>
#include <cmath>
#include <map>
#include <memory>
#include <mutex>
#include <numeric>

#include "market/dates.h"
#include "market/day_count.h"
#include "pricing/invert.h"

namespace duskgrid::night {
namespace {

using publish::ReportExpiry;
using publish::ReportScope;
using quotes::Quote;
using quotes::QuotedIn;
using quotes::Reason;

const ReportExtras kNothing;

bool pages_for_all(const NightConfig& config, std::size_t underlyings) {
  return config.report == ReportScope::all ||
         (config.report == ReportScope::automatic && underlyings < publish::kManyPages);
}

// At equal strike, to which the parts add up.
publish::ReportChange shown(const publish::NodeChange& node) {
  const auto& parts = node.parts;
  return {node.node.expiry, node.node.tenor, node.k,     node.node.strike, node.vol_old_at_strike,
          node.node.vol,    parts.level,     parts.skew, parts.curvature,  parts.forward,
          parts.roll_down,  parts.rest,      node.move,  node.near,        node.typical,
          node.sign_off};
}

// The as-of that a record names, if it can be read.
std::optional<quotes::Instant> instant_of(const std::string& text, const ResolvedNight& night) {
  const auto cell = quotes::parse_date_cell(text);
  if (!cell) return std::nullopt;
  return quotes::resolve(*cell, night.as_of.clock, night.times.default_time);
}

// Rows of the table by underlying; those without a name are in none.
std::vector<std::vector<const Quote*>> rows_by_underlying(const quotes::QuoteTable& table) {
  std::vector<std::vector<const Quote*>> rows(table.underlyings.size());
  for (const auto& q : table.quotes)
    if (q.underlying >= 0) rows[static_cast<std::size_t>(q.underlying)].push_back(&q);
  return rows;
}

// Quotes that were sound when pairs were made: what selection has found since is no fault of
// theirs.
bool paired(const Quote& q) {
  switch (q.reason) {
    case Reason::none:
    case Reason::in_the_money:
    case Reason::far_wing:
    case Reason::thinned:
    case Reason::immediate_exercise:
    case Reason::below_intrinsic:
    case Reason::above_bound:
    case Reason::outlier:
    case Reason::no_forward: return q.quoted_in == QuotedIn::price;
    default: return false;
  }
}

// K + low/D to K + high/D of every strike with a sound call and put; quotes by strike.
std::vector<publish::ReportPair> pairs_of(const std::vector<const Quote*>& quotes,
                                          double discount_factor) {
  std::vector<publish::ReportPair> pairs;
  const Quote* call = nullptr;
  for (const auto* q : quotes) {
    if (!paired(*q)) continue;
    if (q->put_call == quotes::PutCall::call) {
      call = q;
    } else if (call != nullptr && call->strike == q->strike) {
      pairs.push_back({q->strike, q->strike + (call->bid - q->ask) / discount_factor,
                       q->strike + (call->ask - q->bid) / discount_factor});
    }
  }
  return pairs;
}

// Volatilities of what was dropped before any were worked out, so that it can be seen where the
// quote lies. None for American quotes: theirs are found by chains, with early exercise, and those
// of a European formula would lie elsewhere.
class Dropped {
 public:
  Dropped(const market::ForwardEstimate& forward, double year_fraction)
      : forward_(forward), year_fraction_(year_fraction) {}

  bool lacks_vols(const Quote& q) const {
    return quotes::state_of(q.reason) == quotes::State::dropped && q.quoted_in == QuotedIn::price &&
           q.exercise == quotes::Exercise::european && q.strike > 0 && !std::isfinite(q.vol_bid) &&
           !std::isfinite(q.vol_ask);
  }
  Quote with_vols(Quote q) const {
    q.vol_bid = vol(q, q.bid);
    q.vol_ask = vol(q, q.ask);
    return q;
  }

 private:
  double vol(const Quote& q, double price) const {
    const auto found = pricing::implied_vol(
        {q.put_call, forward_.forward, q.strike, forward_.discount_factor}, price, year_fraction_);
    return found.status == pricing::VolStatus::ok ? found.vol : quotes::kAbsent;
  }
  const market::ForwardEstimate& forward_;
  double year_fraction_;
};

std::string counted(std::size_t n, const char* what) {
  return fmt::format("{} {}{}", n, what, n == 1 ? "" : "s");
}

// The first few of a list, and how many more there are.
std::string few(const std::vector<std::string>& items) {
  constexpr std::size_t kFew = 8;
  std::string text;
  for (std::size_t i = 0; i < std::min(kFew, items.size()); ++i)
    text += (i == 0 ? "" : ", ") + items[i];
  return items.size() <= kFew ? text : text + fmt::format(" and {} more", items.size() - kFew);
}

// The points of a curve as they were written, by time.
std::string points_of(const std::map<std::string, double>& stated, const char* what,
                      const quotes::AsOf& as_of) {
  std::vector<std::pair<quotes::Instant, std::string>> points;
  for (const auto& [key, value] : stated) {
    const auto tenor = market::parse_tenor(key);
    const auto cell = tenor ? std::nullopt : quotes::parse_date_cell(key);
    if (tenor) points.emplace_back(add_tenor(as_of.instant, *tenor, as_of.clock), key);
    if (cell) points.emplace_back(quotes::resolve(*cell, as_of.clock, std::chrono::hours{16}), key);
  }
  std::sort(points.begin(), points.end());
  std::vector<std::string> keys;
  for (auto& point : points) keys.push_back(std::move(point.second));
  return counted(keys.size(), what) + ": " + few(keys);
}

// The dividends that some expiry sees, by ex date.
std::string dividends_of(const std::string& name, const ResolvedNight& night,
                         quotes::Instant last_expiry) {
  const auto found = night.dividends.find(name);
  if (found == night.dividends.end()) return "";
  std::vector<market::DatedDividend> dated;
  for (const auto& d : found->second)
    if (d.ex > night.as_of.instant && d.ex < last_expiry) dated.push_back(d);
  std::stable_sort(dated.begin(), dated.end(),
                   [](const auto& a, const auto& b) { return a.ex < b.ex; });
  std::vector<std::string> texts;
  for (const auto& d : dated)
    texts.push_back(fmt::format("{} {} {}", quotes::format_date(night.as_of.clock, d.ex), d.amount,
                                market::word(d.kind)));
  return texts.empty() ? "" : counted(texts.size(), "dividend") + ": " + few(texts);
}

// What was stated for the night as a whole or for this name; what was worked out an expiry is in
// the financing rows.
std::vector<publish::ReportFact> facts_of(const std::string& name, const NightConfig& config,
                                          const ResolvedNight& night, quotes::Instant last_expiry) {
  std::vector<publish::ReportFact> facts;
  const auto given = [&](const char* label, std::string value) {
    if (!value.empty()) facts.push_back({label, std::move(value), "given"});
  };
  if (!config.rates.empty()) given("Rates", points_of(config.rates, "point", night.as_of));
  if (!config.discount_factors.empty())
    given("Discount factors", points_of(config.discount_factors, "point", night.as_of));
  const auto found = config.underlyings.find(name);
  const UnderlyingFacts none;
  const auto& stated = found == config.underlyings.end() ? none : found->second;
  const auto spot = stated.spot ? stated.spot : config.spot;
  if (spot) given("Spot", fmt::format("{}", *spot));
  if (stated.carry) given("Carry", fmt::format("{:.4g} % a year", 100 * *stated.carry));
  if (stated.borrow) given("Borrow", fmt::format("{:.4g} % a year", 100 * *stated.borrow));
  given("Dividends", dividends_of(name, night, last_expiry));
  if (!stated.forwards.empty()) given("Forwards", counted(stated.forwards.size(), "expiry date"));
  if (stated.exercise)
    given("Exercise", *stated.exercise == quotes::Exercise::american ? "american" : "european");
  return facts;
}

// One underlying's page in the making; owns what the page refers to.
class Subject {
 public:
  Subject(const MarkedUnderlying& marked, const std::vector<const Quote*>& rows,
          const ReportExtras& extras, const NightConfig& config, const ResolvedNight& night) {
    page_.record = &marked.record;
    page_.surface = marked.surface ? &*marked.surface : nullptr;
    page_.violations = marked.violations;
    page_.changes = extras.changes;
    page_.previous = extras.previous;
    place(marked, rows, night.as_of.instant);
    const auto last = page_.expiries.empty() ? night.as_of.instant : page_.expiries.back().expiry;
    page_.facts = facts_of(marked.record.name, config, night, last);
    for (auto& e : page_.expiries) complete(e, extras);
  }
  publish::ReportSubject& page() { return page_; }

 private:
  void place(const MarkedUnderlying& marked, const std::vector<const Quote*>& rows,
             quotes::Instant as_of) {
    std::map<quotes::Instant, ReportExpiry> expiries;
    const auto at = [&](quotes::Instant expiry) -> ReportExpiry& {
      auto& e = expiries[expiry];
      e.expiry = expiry;
      e.year_fraction = market::year_fraction(as_of, expiry);
      return e;
    };
    for (const auto* q : rows)
      if (q->expiry == quotes::kNoInstant || !(q->strike > 0))
        page_.unplaced.push_back(q);
      else
        at(q->expiry).quotes.push_back(q);
    for (const auto& row : marked.forwards) at(row.expiry).forward = row.estimate;
    for (const auto& row : marked.financing) at(row.expiry).financing = row;
    if (marked.surface)
      for (const auto& slice : marked.surface->slices) at(slice.expiry);
    for (auto& [expiry, e] : expiries) page_.expiries.push_back(std::move(e));
  }

  void complete(ReportExpiry& e, const ReportExtras& extras) {
    std::stable_sort(e.quotes.begin(), e.quotes.end(), [](const Quote* a, const Quote* b) {
      return std::pair(a->strike, a->put_call) < std::pair(b->strike, b->put_call);
    });
    if (const auto found = extras.bands.find(e.expiry); found != extras.bands.end())
      e.band = found->second;
    if (const auto found = extras.carried.find(e.expiry); found != extras.carried.end())
      e.carried_from = found->second;
    if (!e.forward) return;
    e.pairs = pairs_of(e.quotes, e.forward->discount_factor);
    const Dropped dropped(*e.forward, e.year_fraction);
    for (auto& q : e.quotes) {
      if (!dropped.lacks_vols(*q)) continue;
      owned_.push_back(std::make_unique<Quote>(dropped.with_vols(*q)));
      q = owned_.back().get();
    }
  }

  publish::ReportSubject page_;
  std::vector<std::unique_ptr<Quote>> owned_;
};

class ReportWriter {
 public:
  ReportWriter(publish::RunFolder& folder, const quotes::QuoteTable& table,
               const std::vector<MarkedUnderlying>& marked, const std::vector<ReportExtras>& extras,
               const NightConfig& config, const ResolvedNight& night)
      : folder_(folder),
        table_(table),
        marked_(marked),
        extras_(extras),
        config_(config),
        night_(night),
        rows_(marked.size()) {
    auto by_underlying = rows_by_underlying(table);
    std::map<std::string_view, std::size_t> places;
    for (std::size_t i = 0; i < table.underlyings.size(); ++i) places[table.underlyings[i]] = i;
    for (std::size_t i = 0; i < marked.size(); ++i)
      if (const auto found = places.find(marked[i].record.name); found != places.end())
        rows_[i] = std::move(by_underlying[found->second]);
    for (std::size_t i = 0; i < marked.size(); ++i) lines_.push_back(line_of(i));
    order_.resize(marked.size());
    std::iota(order_.begin(), order_.end(), std::size_t{0});
    std::sort(order_.begin(), order_.end(), [&](std::size_t a, std::size_t b) {
      return publish::more_concern(lines_[a], lines_[b]);
    });
  }

  Result<bool> write(const publish::RunRecord& record, const std::vector<std::string>& remarks) {
    std::vector<std::size_t> paged;
    for (const auto i : order_)
      if (lines_[i].has_page) paged.push_back(i);
    std::vector<publish::ReportLine> sorted;
    for (const auto i : order_) sorted.push_back(lines_[i]);
    auto written = add("index.html", publish::report_index(record, sorted, remarks));
    if (written && !paged.empty()) written = add("duskgrid.css", publish::report_style());
    if (written && !paged.empty()) written = add("duskgrid.js", publish::report_script());
    return written ? write_pages(paged) : written;
  }

 private:
  const ReportExtras& extras(std::size_t i) const {
    return extras_.empty() ? kNothing : extras_[i];
  }

  bool wanted(const publish::ReportLine& line) const {
    return pages_for_all(config_, marked_.size()) ||
           line.record->status != publish::Status::published || line.flagged_changes > 0 ||
           line.carried_expiries > 0;
  }

  publish::ReportLine line_of(std::size_t i) const {
    publish::ReportLine line{&marked_[i].record, {}};
    for (const auto* q : rows_[i]) {
      line.rows.add(q->reason);
      if (std::isfinite(q->miss) && std::abs(q->miss) > std::abs(line.worst_miss))
        line.worst_miss = q->miss;
    }
    for (const auto& c : extras(i).changes) {
      line.flagged_changes += c.sign_off != publish::SignOff::none ? 1 : 0;
      if (c.near && !(std::abs(c.move) <= std::abs(line.largest_move))) line.largest_move = c.move;
    }
    line.carried_expiries = static_cast<std::int64_t>(extras(i).carried.size());
    line.has_page = wanted(line);
    return line;
  }

  Result<bool> add(const std::string& file, const std::string& text) {
    return folder_.add("report/" + file, [&](publish::RunFile& out) { out.write(text); });
  }

  std::string page_of(const std::vector<std::size_t>& paged, std::size_t at) const {
    const std::size_t i = paged[at];
    Subject subject(marked_[i], rows_[i], extras(i), config_, night_);
    const auto file = [&](std::size_t other) {
      return publish::report_file_name(marked_[paged[other]].record.name);
    };
    if (at > 0) subject.page().file_before = file(at - 1);
    if (at + 1 < paged.size()) subject.page().file_after = file(at + 1);
    return publish::report_page(subject.page(), table_, night_.as_of);
  }

  // The first failure in the order of the pages, so that it does not depend on the threads.
  Result<bool> write_pages(const std::vector<std::size_t>& paged) {
    std::map<std::size_t, Failure> failures;
    std::mutex failing;
    tbb::parallel_for(std::size_t{0}, paged.size(), [&](std::size_t at) {
      const auto file = publish::report_file_name(marked_[paged[at]].record.name);
      const auto written = add(file, page_of(paged, at));
      if (written) return;
      const std::lock_guard lock(failing);
      failures.emplace(at, written.failure());
    });
    if (failures.empty()) return true;
    return failures.begin()->second;
  }

  publish::RunFolder& folder_;
  const quotes::QuoteTable& table_;
  const std::vector<MarkedUnderlying>& marked_;
  const std::vector<ReportExtras>& extras_;
  const NightConfig& config_;
  const ResolvedNight& night_;
  std::vector<std::vector<const Quote*>> rows_;  // by marked underlying
  std::vector<publish::ReportLine> lines_;       // likewise
  std::vector<std::size_t> order_;               // by concern
};

}  // namespace

ReportChanges::ReportChanges(const std::vector<MarkedUnderlying>& marked, const NightConfig& config,
                             const ResolvedNight& night)
    : marked_(marked), all_pages_(pages_for_all(config, marked.size())), extras_(marked.size()) {
  for (std::size_t i = 0; i < marked.size(); ++i) {
    const auto from = instant_of(marked[i].record.carried_from, night);
    if (!from || !marked[i].surface) continue;
    for (const auto& slice : marked[i].surface->slices) extras_[i].carried[slice.expiry] = *from;
  }
}

SeenChange ReportChanges::taker(quotes::Instant previous) {
  for (auto& e : extras_) e.previous = previous;
  return [this](const MarkedUnderlying& name, const publish::UnderlyingChange& change) {
    auto& changes = extras_[static_cast<std::size_t>(&name - marked_.data())].changes;
    if (all_pages_ || name.record.status != publish::Status::published) {
      for (const auto& node : change.nodes) changes.push_back(shown(node));
    } else if (const auto* largest = change.largest()) {
      changes.push_back(shown(*largest));
    }
  };
}

Result<bool> write_report(publish::RunFolder& folder, const quotes::QuoteTable& table,
                          const std::vector<MarkedUnderlying>& marked,
                          const std::vector<ReportExtras>& extras, const NightConfig& config,
                          const ResolvedNight& night, const publish::RunRecord& record,
                          const std::vector<std::string>& remarks) {
  if (config.report == ReportScope::none) return true;
  return ReportWriter(folder, table, marked, extras, config, night).write(record, remarks);
}

}  // namespace duskgrid::night
