// The page of one underlying: report.h.
#include <algorithm>
#include <array>
#include <cmath>
#include <map>

#include "market/day_count.h"
#include "publish/grid.h"
#include "publish/report.h"
#include "publish/report/files.h"
#include "publish/report_text.h"
#include "surface/derived.h"

namespace duskgrid::publish {
namespace {

// Significant digits: vols to 0.001 of a vol point, prices of any chain to their tick.
constexpr int kVolDigits = 5, kShapeDigits = 4, kPriceDigits = 7, kMissDigits = 3;
// Moves, so that they round as they do elsewhere.
constexpr int kMoveDigits = 7;
// Points of a drawn smile. Closer at the money than in the wings, where smiles are straighter.
constexpr int kCurvePoints = 69;

constexpr std::array<double, 31> kMoneyness{
    0.2,   0.3, 0.4,  0.5, 0.6,  0.7, 0.75, 0.8, 0.85, 0.9, 0.925, 0.95, 0.975, 1.0, 1.025, 1.05,
    1.075, 1.1, 1.15, 1.2, 1.25, 1.3, 1.4,  1.5, 1.6,  1.8, 2.0,   2.5,  3.0,   4.0, 5.0};

// Strings told by their place in a list, each kept once.
class Names {
 public:
  std::int64_t place(std::int32_t index) {
    if (index < 0) return -1;
    const auto [found, fresh] =
        places_.try_emplace(index, static_cast<std::int64_t>(order_.size()));
    if (fresh) order_.push_back(index);
    return found->second;
  }
  void write(JsonText& json, std::string_view key, const std::vector<std::string>& texts) const {
    json.key(key).open('[');
    for (const auto index : order_) json.text(texts[static_cast<std::size_t>(index)]);
    json.close(']');
  }

 private:
  std::map<std::int32_t, std::int64_t> places_;
  std::vector<std::int32_t> order_;
};

class PageWriter {
 public:
  PageWriter(const ReportSubject& subject, const quotes::QuoteTable& table,
             const quotes::AsOf& as_of)
      : subject_(subject), table_(table), as_of_(as_of) {}

  std::string data() {
    json_.open('{');
    write_head();
    write_facts();
    write_expiries();
    write_heat();
    write_violations();
    write_changes();
    write_unplaced();
    files_.write(json_, "files", table_.files);
    notes_.write(json_, "notes", table_.notes);
    json_.close('}');
    return json_.take();
  }

 private:
  std::string instant(quotes::Instant at) const { return quotes::format_instant(as_of_.clock, at); }

  void write_head() {
    const auto& r = *subject_.record;
    json_.key("name").text(r.name).key("status").count(static_cast<int>(r.status));
    json_.key("certified").flag(r.certified).key("message").text(r.message);
    json_.key("as_of").text(instant(as_of_.instant)).key("zone").text(as_of_.clock.zone);
    json_.key("carried_from").text(r.carried_from);
    json_.key("used").count(r.used).key("inside").count(r.inside);
    json_.key("spot").number(subject_.surface ? subject_.surface->spot : std::nullopt,
                             kPriceDigits);
    json_.key("before").text(subject_.file_before).key("after").text(subject_.file_after);
  }

  void write_facts() {
    json_.key("facts").open('[');
    for (const auto& fact : subject_.facts)
      json_.open('[').text(fact.label).text(fact.value).text(fact.origin).close(']');
    json_.close(']');
  }

  // The date, and the time where a date has two expiries.
  std::string label(quotes::Instant expiry) const {
    const auto date = quotes::format_date(as_of_.clock, expiry);
    const auto same = std::count_if(
        subject_.expiries.begin(), subject_.expiries.end(),
        [&](const auto& e) { return quotes::format_date(as_of_.clock, e.expiry) == date; });
    return same > 1 ? date + " " + instant(expiry).substr(11, 5) : date;
  }

  std::int64_t place_of(quotes::Instant expiry) const {
    const auto found = std::find_if(subject_.expiries.begin(), subject_.expiries.end(),
                                    [&](const auto& e) { return e.expiry == expiry; });
    return found == subject_.expiries.end() ? -1 : found - subject_.expiries.begin();
  }

  const surface::Slice* slice_of(quotes::Instant expiry) const {
    if (!subject_.surface) return nullptr;
    for (const auto& slice : subject_.surface->slices)
      if (slice.expiry == expiry) return &slice;
    return nullptr;
  }

  void write_expiries() {
    json_.key("expiries").open('[');
    for (const auto& e : subject_.expiries) write_expiry(e);
    json_.close(']');
  }

  void write_expiry(const ReportExpiry& e) {
    json_.open('{').key("at").text(instant(e.expiry)).key("label").text(label(e.expiry));
    json_.key("t").number(e.year_fraction, kPriceDigits);
    if (e.forward) write_forward(*e.forward);
    write_pairs(e.pairs);
    if (e.financing) write_financing(*e.financing);
    if (const auto* slice = slice_of(e.expiry)) write_fit(*slice, e);
    if (e.carried_from) write_carried(*e.carried_from);
    if (!e.band.empty()) write_band(e.band);
    json_.key("quotes").open('[');
    for (const auto* q : e.quotes) write_quote(*q);
    json_.close(']').close('}');
  }

  void write_forward(const market::ForwardEstimate& f) {
    json_.key("forward").open('[').number(f.forward, 8).number(f.discount_factor, 7);
    json_.number(f.zero_rate, kVolDigits).number(f.carry, kVolDigits);
    json_.count(f.pairs).count(f.breaks).text(market::word(f.source));
    json_.number(f.lowest_forward, 8).number(f.highest_forward, 8).close(']');
  }

  void write_pairs(const std::vector<ReportPair>& pairs) {
    json_.key("pairs").open('[');
    for (const auto& pair : pairs)
      json_.open('[')
          .number(pair.strike)
          .number(pair.forward_low, kPriceDigits)
          .number(pair.forward_high, kPriceDigits)
          .close(']');
    json_.close(']');
  }

  void write_financing(const FinancingRow& f) {
    json_.key("financing").open('[').number(f.spot, kPriceDigits).text(word(f.spot_origin));
    json_.number(f.zero_rate, kVolDigits).text(word(f.rate_origin));
    json_.count(static_cast<std::int64_t>(f.dividends)).number(f.dividend_effect, kVolDigits);
    json_.number(f.borrow, kVolDigits).text(word(f.borrow_origin));
    json_.text(word(f.exercise)).close(']');
  }

  void write_carried(quotes::Instant from) {
    json_.key("carried").open('[').text(instant(from));
    json_.number(market::year_fraction(from, as_of_.instant) * 365, 3).close(']');
  }

  void write_band(const std::vector<ReportBand>& band) {
    json_.key("band").open('[');
    for (const auto& b : band)
      json_.open('[')
          .number(b.k, kVolDigits)
          .number(b.vol_low, kVolDigits)
          .number(b.vol_high, kVolDigits)
          .close(']');
    json_.close(']');
  }

  // ln(K/F) at which a smile is drawn: all its quotes and the middle, and a little beyond; the ends
  // of what rests on quotes are among them.
  static std::vector<double> places(const surface::Slice& slice, const ReportExpiry& e) {
    constexpr double kMiddle = 2.5, kBeyond = 0.12, kFurthest = 14;  // at-the-money deviations
    const double s = std::sqrt(surface::smile_of(slice, 0).w);
    double low = std::min(slice.k_low / s, -kMiddle), high = std::max(slice.k_high / s, kMiddle);
    for (const auto* q : e.quotes) {
      if (!(q->vol_bid > 0) && !(q->vol_ask > 0)) continue;
      const double z = std::log(q->strike / slice.forward) / s;
      if (std::abs(z) > kFurthest) continue;
      low = std::min(low, z);
      high = std::max(high, z);
    }
    const double from = std::asinh(low) - kBeyond, to = std::asinh(high) + kBeyond;
    std::vector<double> out;
    for (int i = 0; i < kCurvePoints; ++i)
      out.push_back(s * std::sinh(from + (to - from) * i / (kCurvePoints - 1)));
    out.insert(out.end(), {slice.k_low, slice.k_high});
    std::sort(out.begin(), out.end());
    out.erase(std::unique(out.begin(), out.end()), out.end());
    return out;
  }

  void write_fit(const surface::Slice& slice, const ReportExpiry& e) {
    const double t = slice.year_fraction;
    const auto k = places(slice, e);
    json_.key("fit").open('{');
    json_.key("low").number(slice.k_low, kVolDigits).key("high").number(slice.k_high, kVolDigits);
    json_.key("atm").number(std::sqrt(surface::smile_of(slice, 0).w / t), kVolDigits);
    std::vector<surface::SmilePoint> points;
    for (const double at : k) points.push_back(surface::smile_of(slice, at));
    json_.key("k").open('[');
    for (const double at : k) json_.number(at, kVolDigits);
    json_.close(']').key("vol").open('[');
    for (const auto& p : points) json_.number(std::sqrt(p.w / t), kVolDigits);
    json_.close(']').key("density").open('[');
    for (std::size_t i = 0; i < k.size(); ++i)
      json_.number(surface::log_density({points[i].w, points[i].dw_dk, points[i].d2w_dk2, 0}, k[i]),
                   kShapeDigits);
    json_.close(']').close('}');
  }

  // By strike; what each number is: quoteFields of frame.js.
  void write_quote(const quotes::Quote& q) {
    json_.open('[').number(q.strike).flag(q.put_call == quotes::PutCall::put);
    json_.count(static_cast<int>(q.reason));
    json_.number(q.bid, kPriceDigits).number(q.ask, kPriceDigits);
    json_.number(q.vol_bid, kVolDigits).number(q.vol_ask, kVolDigits);
    json_.number(q.vol_fit, kVolDigits).number(q.miss, kMissDigits);
    json_.count(files_.place(q.file)).count(q.line).count(notes_.place(q.note));
    json_.flag(q.quoted_in == quotes::QuotedIn::vol);
    json_.flag(q.exercise == quotes::Exercise::american).close(']');
  }

  void write_unplaced() {
    json_.key("unplaced").open('[');
    for (const auto* q : subject_.unplaced) write_quote(*q);
    json_.close(']');
  }

  // Columns of the heat map: those that a quoted range reaches, and one beyond on either side.
  std::vector<double> columns() const {
    double low = 0, high = 0;
    for (const auto& slice : subject_.surface->slices) {
      low = std::min(low, slice.k_low);
      high = std::max(high, slice.k_high);
    }
    auto first = std::lower_bound(kMoneyness.begin(), kMoneyness.end(), std::exp(low));
    auto last = std::upper_bound(kMoneyness.begin(), kMoneyness.end(), std::exp(high));
    if (first != kMoneyness.begin()) --first;
    if (last != kMoneyness.end()) ++last;
    return {first, last};
  }

  void write_heat() {
    json_.key("heat").open('{').key("moneyness").open('[');
    const auto at = subject_.surface ? columns() : std::vector<double>{};
    for (const double m : at) json_.number(m);
    json_.close(']').key("rows").open('[');
    if (subject_.surface)
      for (const auto& slice : subject_.surface->slices) write_heat_row(slice, at);
    json_.close(']').close('}');
  }

  // [expiry, vols, "10..." with 1 where extrapolated]
  void write_heat_row(const surface::Slice& slice, const std::vector<double>& at) {
    json_.open('[').count(place_of(slice.expiry)).open('[');
    std::string beyond;
    for (const double m : at) {
      const double k = std::log(m);
      json_.number(std::sqrt(surface::smile_of(slice, k).w / slice.year_fraction), kVolDigits);
      const auto support = support_at(*subject_.surface, slice.year_fraction, k);
      beyond += support == Support::extrapolated ? '1' : '0';
    }
    json_.close(']').text(beyond).close(']');
  }

  void write_violations() {
    json_.key("violations").open('[');
    for (const auto& v : subject_.violations) {
      json_.open('[').text(arbitrage::word(v.scope)).text(arbitrage::word(v.kind));
      json_.count(place_of(v.expiry)).count(place_of(v.expiry_2));
      json_.text(instant(v.expiry)).open('[');
      for (const double strike : v.strikes) json_.number(strike);
      json_.close(']').number(v.amount, kVolDigits).number(v.vol_points, kMissDigits);
      json_.number(v.half_spreads, kMissDigits);
      json_.text(arbitrage::format_legs(v.legs, as_of_.clock)).open('[');
      for (const auto& leg : v.legs) write_leg(leg);
      json_.close(']').close(']');
    }
    json_.close(']');
  }

  void write_leg(const arbitrage::Leg& leg) {
    constexpr std::array<std::string_view, 3> kTypes{"C", "P", "F"};
    json_.open('[').number(leg.quantity, kVolDigits);
    json_.text(kTypes[static_cast<std::size_t>(leg.type)]).number(leg.strike);
    json_.count(place_of(leg.expiry)).number(leg.price, kPriceDigits).close(']');
  }

  void write_changes() {
    json_.key("previous").text(subject_.previous ? instant(*subject_.previous) : "");
    json_.key("changes").open('[');
    for (const auto& c : subject_.changes) {
      json_.open('[').count(place_of(c.expiry)).text(quotes::format_date(as_of_.clock, c.expiry));
      json_.text(c.tenor).number(c.k, kVolDigits).number(c.strike, kPriceDigits);
      for (const double vol : {c.vol_before, c.vol_after}) json_.number(vol, kVolDigits);
      for (const double part : {c.level, c.skew, c.curvature, c.forward, c.roll, c.rest})
        json_.number(part, kMissDigits);
      json_.flag(c.sign_off != SignOff::none).number(c.move, kMoveDigits).flag(c.near);
      json_.number(c.typical, kMissDigits).text(word(c.sign_off)).close(']');
    }
    json_.close(']');
  }

  const ReportSubject& subject_;
  const quotes::QuoteTable& table_;
  const quotes::AsOf& as_of_;
  JsonText json_;
  Names files_, notes_;
};

}  // namespace

std::string report_page(const ReportSubject& subject, const quotes::QuoteTable& table,
                        const quotes::AsOf& as_of) {
  // From disk Chromium takes the folder's files for 'self'; other browsers want the scheme. Neither
  // lets anything come from a network.
  constexpr std::string_view kPolicy =
      "default-src 'none'; script-src 'self' file:; style-src 'self' file:; base-uri 'none'; "
      "form-action 'none'";
  const std::string title =
      html_text(subject.record->name) + " · " + quotes::format_date(as_of.clock, as_of.instant);
  const std::string data = PageWriter(subject, table, as_of).data();
  return fill_template(files::underlying_page,
                       {{"policy", kPolicy}, {"title", title}, {"data", data}});
}

}  // namespace duskgrid::publish
