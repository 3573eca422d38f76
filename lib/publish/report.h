// The sign-off report of a night: static pages that open from disk and fetch nothing. From plain
// structs to page texts; who writes the files is run_folder.h. Pages and scripts are under
// lib/publish/report/ and are put into the program when it is built.
#pragma once

#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "arbitrage/violation.h"
#include "publish/compare.h"
#include "publish/run_record.h"
#include "publish/tables.h"
#include "quotes/quote.h"
#include "surface/surface.h"

namespace duskgrid::publish {

// Which underlyings get a page of their own.
enum class ReportScope : std::uint8_t {
  automatic,  // all of a night of fewer than kManyPages, else those worth a look
  all,
  flagged,  // worth a look: flagged, carried, refused, or with a flagged change
  none,     // no report at all
};
inline constexpr std::size_t kManyPages = 200;
std::string_view word(ReportScope scope);
std::optional<ReportScope> parse_report_scope(std::string_view text);

// Something that a mark rests on.
struct ReportFact {
  std::string label;
  std::string value;   // with its unit
  std::string origin;  // "given", "inferred", "carried" or "absent", or the like
};

// One node of the grid against the night before. What moved it, in vol: the parts add up to
// vol_after - vol_before. A part that is not known is kAbsent.
struct ReportChange {
  quotes::Instant expiry;
  std::string tenor;              // empty at a listed expiry
  double k;                       // ln(K/F), today's
  double strike;                  // quote currency
  double vol_before, vol_after;   // decimals a year
  double level, skew, curvature;  // decimals of vol
  double forward, roll, rest;
  // What the sign-off judges, as in compare.h: the move of the surface itself.
  double move;
  bool near;       // close enough to the forward to be judged
  double typical;  // decimals of vol, kAbsent where too few nights are known
  SignOff sign_off;
};

// What one call and put say of the forward: an interval, quote currency.
struct ReportPair {
  double strike;
  double forward_low, forward_high;
};

// Lowest and highest volatility that the quotes allow at one place, decimals a year.
struct ReportBand {
  double k;  // ln(K/F)
  double vol_low, vol_high;
};

// One expiry of an underlying, in the surface or not.
struct ReportExpiry {
  quotes::Instant expiry;
  double year_fraction;  // negative when expired
  std::optional<market::ForwardEstimate> forward;
  std::vector<ReportPair> pairs;             // by strike
  std::vector<const quotes::Quote*> quotes;  // by strike, call before put
  std::vector<ReportBand> band;              // by k; may be empty
  std::optional<FinancingRow> financing;     // of those that lie ahead
  // As-of of the night from which its smile comes, where not this one.
  std::optional<quotes::Instant> carried_from;
};

// All that a page shows of one underlying. Refers to what it is made from.
struct ReportSubject {
  const UnderlyingRecord* record;
  const surface::Surface* surface;                        // null when refused
  std::vector<ReportExpiry> expiries;                     // by time; a superset of the slices
  std::vector<const quotes::Quote*> unplaced;             // rows without an expiry
  std::span<const arbitrage::Violation> violations = {};  // of the quotes and of the surface
  std::vector<ReportChange> changes;
  std::optional<quotes::Instant> previous;  // as-of of the night that changes compare with
  std::vector<ReportFact> facts;
  std::string file_before, file_after;  // pages of the neighbours by concern; empty for none
};

// One line of the index.
struct ReportLine {
  const UnderlyingRecord* record;
  quotes::LedgerCounts rows;
  double worst_miss = 0;  // half-spreads, the largest in size; 0 when all are inside
  std::int64_t carried_expiries = 0;
  std::int64_t flagged_changes = 0;
  double largest_move = quotes::kAbsent;  // of the nodes that are judged; decimals of vol, signed
  bool has_page = false;
};

// What report.h makes of a name: encode_file_name() and ".html", but for the name `index` in any
// case, which would take the place of the index.
std::string report_file_name(std::string_view underlying);

// Sorts by concern: refused, carried, flagged, published; then by violations, by misses, by share
// dropped; then by name.
bool more_concern(const ReportLine& a, const ReportLine& b);

// index.html, self-contained. Lines in the order of concern; texts of all kinds are shown as text.
std::string report_index(const RunRecord& run, std::span<const ReportLine> lines,
                         std::span<const std::string> remarks);
// The page of one underlying; needs report_script() and report_style() beside it.
std::string report_page(const ReportSubject& subject, const quotes::QuoteTable& table,
                        const quotes::AsOf& as_of);

// duskgrid.js and duskgrid.css, shared by the pages.
std::string report_script();
std::string report_style();

}  // namespace duskgrid::publish
