// A certificate that a surface is free of static arbitrage: a proof for every real log-moneyness
// and every time, about the exact surface whose parameters are the stored doubles. What
// surface_checks.h sees on points is evidence; this is a proof, or says where there is none.
// docs/methods.md, section 8.
//
// Where theorems do not settle it (Gatheral & Jacquier 2014, theorems 4.2, 4.3, lemma 5.1; the
// conditions C1 and C2 of docs/methods.md), ranges of k are enclosed by affine arithmetic with all
// rounding counted (affine.h) and halved until every enclosure is free of negative values.
#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "surface/surface.h"

namespace duskgrid::arbitrage {

struct Hyperbola;  // enclosure.h

// What had to be proved.
enum class Proof : std::uint8_t {
  parameters,  // numbers in their ranges, times increasing
  positive,    // total variance > 0 in a slice
  butterfly,   // Durrleman's g >= 0 in a slice
  calendar,    // total variance of the next slice not below this one's
  between,     // g >= 0 at every time up to the next slice, where total variance is linear in time
  after,       // g >= 0 at every time after the last slice, where variance is added to it
};
std::string_view word(Proof proof);

struct Finding {
  Proof proof;
  std::size_t slice;  // the earlier one of two
  double k;           // where; infinite for a wing as a whole
  // At k: total variance (positive), g (butterfly, between), step of total variance (calendar), the
  // lesser of two conditions (after); at an infinite k the limit of g, or the step of the wing's
  // slope.
  // Where nothing was decided, the value computed there, 0 if none was.
  double value;
  bool broken;  // true: arbitrage, proved at k (in far wings k is rounded); false: not decided
};

struct Certificate {
  bool certified;                 // everything was proved
  std::vector<Finding> findings;  // one a statement that was not: the worst place found
  std::int64_t boxes;             // ranges that were looked at
};

struct CertificateOptions {
  // Most ranges looked at for one statement of Proof about one slice. Range: >= 1. More decides
  // surfaces that are closer to arbitrage, and takes longer on those that touch it.
  std::int64_t most_boxes = 20'000;
  std::optional<std::string> problem() const;
};

// Deterministic. With options that have a problem, nothing is proved.
Certificate certify(const surface::Surface& surface, const CertificateOptions& options = {});

// The same surface with rule `price` wherever total variance linear in time is not proved free of
// butterfly arbitrage. Rules that are `price` stay so.
surface::Surface with_proved_rules(surface::Surface surface,
                                   const CertificateOptions& options = {});

// The statements `positive` and `butterfly` alone, of any hyperbola (raw SVI) with an overlay on
// its total variance, without the theorems.
Certificate certify_smile(const Hyperbola& backbone, const surface::Overlay& overlay,
                          const CertificateOptions& options = {});

}  // namespace duskgrid::arbitrage
