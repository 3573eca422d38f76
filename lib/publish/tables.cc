#include "publish/tables.h"

#include <fmt/format.h>

#include <array>
#include <iterator>

#include "publish/text.h"

namespace duskgrid::publish {
namespace {

// One line of cells. Text is quoted and guarded, numbers are shortest round trip.
class Line {
 public:
  Line() { out_.reserve(kUsualSize); }
  Line& text(std::string_view cell) {
    // Most need neither quotes nor a guard, and no copy then.
    return csv_plain(cell) ? raw(cell) : raw(csv_text(cell));
  }
  Line& number(double cell) {
    raw("");
    add_csv_number(cell, out_);
    return *this;
  }
  Line& count(std::int64_t cell) {
    raw("");
    fmt::format_to(std::back_inserter(out_), "{}", cell);
    return *this;
  }
  // Words and instants of our own: nothing in them to quote.
  Line& raw(std::string_view cell) {
    if (!first_) out_ += ',';
    first_ = false;
    out_ += cell;
    return *this;
  }
  Line& empty(int cells) {
    for (int i = 0; i < cells; ++i) raw("");
    return *this;
  }
  std::string end() { return std::move(out_) + '\n'; }

 private:
  static constexpr std::size_t kUsualSize = 256;
  std::string out_;
  bool first_ = true;
};

Line time_cells(const ValueTime& time, InstantTexts& instants) {
  Line line;
  line.raw(instants.of(time.expiry))
      .raw(time.tenor)
      .number(time.year_fraction)
      .number(time.carried.forward)
      .number(time.carried.discount_factor);
  return line;
}

}  // namespace

const std::string& InstantTexts::of(quotes::Instant instant) {
  const auto [found, added] = texts_.try_emplace(instant.time_since_epoch().count());
  if (added) found->second = quotes::format_instant(clock_, instant);
  return found->second;
}

std::string grid_line(const GridNode& node, Axis axis, std::string_view underlying,
                      quotes::Instant as_of, InstantTexts& instants) {
  return Line()
      .raw(instants.of(as_of))
      .text(underlying)
      .raw(instants.of(node.expiry))
      .raw(node.tenor)
      .number(node.year_fraction)
      .number(node.forward)
      .number(node.discount_factor)
      .raw(word(axis))
      .number(node.point)
      .number(node.strike)
      .number(node.vol)
      .empty(2)  // the band
      .raw(word(node.support))
      .end();
}

std::string ledger_line(const quotes::Quote& q, const quotes::QuoteTable& table,
                        InstantTexts& instants) {
  Line line;
  line.text(table.files[q.file]).count(q.line);
  if (q.reason == quotes::Reason::unreadable) {
    line.empty(8);
  } else {
    line.text(table.underlyings[q.underlying])
        .raw(instants.of(q.expiry))
        .number(q.strike)
        .raw(q.put_call == quotes::PutCall::call ? "C" : "P")
        .raw(q.exercise == quotes::Exercise::european ? "european" : "american")
        .raw(q.quoted_in == quotes::QuotedIn::price ? "price" : "vol")
        .number(q.bid)
        .number(q.ask);
  }
  return line.raw(word(quotes::state_of(q.reason)))
      .raw(word(q.reason))
      .text(q.note < 0 ? std::string_view() : table.notes[q.note])
      .number(q.vol_bid)
      .number(q.vol_ask)
      .number(q.vol_fit)
      .number(q.miss)
      .end();
}

std::string forwards_line(const ForwardRow& row, std::string_view underlying,
                          const quotes::Clock& clock) {
  const auto& e = row.estimate;
  return Line()
      .text(underlying)
      .raw(quotes::format_instant(clock, row.expiry))
      .number(row.year_fraction)
      .number(e.forward)
      .number(e.discount_factor)
      .number(e.zero_rate)
      .number(e.carry.value_or(quotes::kAbsent))
      .count(e.pairs)
      .count(e.breaks)
      .raw(word(e.source))
      .end();
}

std::string_view word(Origin origin) {
  constexpr std::array<std::string_view, 6> kWords{"",         "given", "rows",
                                                   "inferred", "near",  "assumed"};
  return kWords[static_cast<std::size_t>(origin)];
}

std::string_view word(ExerciseTaken taken) {
  constexpr std::array<std::string_view, 3> kWords{"european", "american", "american-as-european"};
  return kWords[static_cast<std::size_t>(taken)];
}

std::string financing_line(const FinancingRow& row, std::string_view underlying,
                           const quotes::Clock& clock) {
  return Line()
      .text(underlying)
      .raw(quotes::format_instant(clock, row.expiry))
      .raw(word(row.exercise))
      .number(row.spot)
      .raw(word(row.spot_origin))
      .number(row.zero_rate)
      .raw(word(row.rate_origin))
      .count(static_cast<std::int64_t>(row.dividends))
      .number(row.dividend_effect)
      .number(row.borrow)
      .raw(word(row.borrow_origin))
      .end();
}

std::string expiries_line(const ExpiryRow& row, std::string_view underlying,
                          InstantTexts& instants) {
  return Line()
      .text(underlying)
      .raw(instants.of(row.expiry))
      .count(row.quotes)
      .count(row.used)
      .count(row.inside)
      .number(row.rms_vol)
      .raw(row.print)
      .end();
}

std::string violations_line(const arbitrage::Violation& v, std::string_view underlying,
                            const quotes::Clock& clock) {
  Line line;
  line.text(underlying)
      .raw(word(v.scope))
      .raw(word(v.kind))
      .raw(quotes::format_instant(clock, v.expiry))
      .raw(v.expiry_2 == quotes::kNoInstant ? "" : quotes::format_instant(clock, v.expiry_2));
  for (std::size_t i = 0; i < 3; ++i)
    line.number(i < v.strikes.size() ? v.strikes[i] : quotes::kAbsent);
  // The legs may start with a plus or a minus that is no formula: the guard keeps spreadsheets from
  // running them, as for any text.
  return line.number(v.amount)
      .number(v.vol_points)
      .number(v.half_spreads)
      .text(format_legs(v.legs, clock))
      .end();
}

std::string values_line(const ValueTime& time, const ValueRow& row, InstantTexts& instants) {
  Line line = time_cells(time, instants);
  line.number(row.strike).number(row.k);
  if (!row.derived) return line.empty(8).raw(word(row.support)).end();
  const auto& d = *row.derived;
  return line.number(d.vol)
      .raw(d.put_call == quotes::PutCall::call ? "C" : "P")
      .number(d.price)
      .number(d.greeks.delta)
      .number(d.greeks.gamma)
      .number(d.greeks.vega)
      .number(d.density.value_or(quotes::kAbsent))
      .number(d.local_vol.value_or(quotes::kAbsent))
      .raw(word(row.support))
      .end();
}

std::string swaps_line(const ValueTime& time, double vol_at_forward,
                       const std::optional<surface::VarianceSwap>& swap, InstantTexts& instants) {
  return time_cells(time, instants)
      .number(vol_at_forward)
      .number(swap ? swap->vol : quotes::kAbsent)
      .number(swap ? swap->variance : quotes::kAbsent)
      .end();
}

}  // namespace duskgrid::publish
