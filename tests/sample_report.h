// An invented underlying with one planted fault of each kind, for tests of the report.
#pragma once

#include <string>
#include <vector>

#include "publish/report.h"

namespace duskgrid {

// Owns what its subject refers to; not to be moved once made.
struct SampleReport {
  // `expiries` slices of `strikes` strikes with a call and a put each.
  SampleReport(const std::string& name, int expiries, int strikes);
  SampleReport(const SampleReport&) = delete;
  SampleReport& operator=(const SampleReport&) = delete;

  quotes::AsOf as_of;
  quotes::QuoteTable table;
  surface::Surface surface;
  publish::UnderlyingRecord record;
  std::vector<arbitrage::Violation> violations;
  publish::ReportSubject subject;
  // Where the faults are.
  quotes::Instant carried_expiry, changed_expiry, broken_expiry;
  double outlier_strike = 0;

 private:
  void add_slices(int expiries);
  void add_quotes(const surface::Slice& slice, int strikes);
  void plant();
  void add_changes();
};

// A night of that many underlyings, with statuses, messages and names of every kind, those that a
// browser or a spreadsheet would run among them.
struct SampleNight {
  explicit SampleNight(int underlyings);
  publish::RunRecord run;
  std::vector<publish::ReportLine> lines;  // in the order of concern
};

}  // namespace duskgrid
