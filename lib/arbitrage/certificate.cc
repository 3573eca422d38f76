#include "arbitrage/certificate.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <utility>

#include "arbitrage/enclosure.h"
#include "arbitrage/exact_sum.h"
#include "arbitrage/search.h"

namespace duskgrid::arbitrage {
namespace {

using surface::SliceParameters;

constexpr double kInfinity = std::numeric_limits<double>::infinity();

// ---- Conditions on backbones, by exact signs (docs/methods.md 5.1) ----

// 4 - psi (1 +- rho).
ExactSum wing_room(const SliceParameters& p, double sign) {
  return ExactSum().add(4).add(-p.psi).add_product(-sign * p.psi, p.rho);
}

// B1 and B2: with them a slice has no butterfly arbitrage (Gatheral & Jacquier 2014, theorem 4.2),
// nor has it with any constant added to w (theorem 4.3).
bool meets_b(const SliceParameters& p) {
  if (!wing_room(p, -1).positive() || !wing_room(p, 1).positive()) return false;
  const double rho = std::abs(p.rho), high = p.psi * p.psi, low = std::fma(p.psi, p.psi, -high);
  if (p.psi != 0 && !(high > 0x1p-700)) return false;
  return ExactSum()
      .add(4 * p.theta)
      .add(-high)
      .add(-low)
      .add_product(-high, rho)
      .add_product(-low, rho)
      .not_negative();
}

// psi (1 +- rho) of b less that of a.
ExactSum wing_step(const SliceParameters& a, const SliceParameters& b, double sign) {
  return ExactSum()
      .add(b.psi)
      .add(-a.psi)
      .add_product(sign * b.psi, b.rho)
      .add_product(-sign * a.psi, a.rho);
}

// C1 and C2, and theta not falling: with them w of b is nowhere below that of a.
bool meets_c(const SliceParameters& a, const SliceParameters& b) {
  return wing_step(a, b, -1).not_negative() && wing_step(a, b, 1).not_negative() &&
         ExactSum().add_product(a.psi, b.theta).add_product(-b.psi, a.theta).not_negative() &&
         b.theta >= a.theta;
}

// ---- Smiles and the ranges they are looked at over ----

// Left and right of its pieces a smile is its backbone with an end of the overlay added.
struct Smile {
  Hyperbola backbone;
  std::vector<Cubic> pieces;
  double left = 0, right = 0;

  static Smile of(const Hyperbola& backbone, const surface::Overlay& overlay) {
    if (overlay.empty()) return {backbone, {}};
    return {backbone, pieces_of(overlay), overlay.coefficients.front(),
            overlay.coefficients.back()};
  }
  // Seen from its left tail, with k for -k, or from its right.
  Hyperbola tail(bool from_left) const {
    return from_left ? backbone.mirrored().raised(left) : backbone.raised(right);
  }
  bool ends_at_least(double least_left, double least_right) const {
    return left >= least_left && right >= least_right;
  }
};

// What an overlay is over a stretch: one of its pieces, or none and a constant.
struct Part {
  const Cubic* piece = nullptr;
  double constant = 0;
};

struct Stretch {
  double low, high;
  Part first, second;
};

// The ranges between the knots of both smiles, from the first of all to the last, whether or not
// any piece lies there; with `outside`, widened to where the tails begin.
struct Ranges {
  std::vector<Stretch> stretches;
  double left_tail, right_tail;  // |k| > 0 where they begin
};

// Neither end of a smile's pieces lies within the stretch. Told by its ends, since the middle of
// two neighbouring doubles is one of them.
Part part_over(const Smile& smile, double low, double high) {
  const auto& pieces = smile.pieces;
  if (pieces.empty()) return {};
  const auto after = std::upper_bound(pieces.begin(), pieces.end(), low,
                                      [](double k, const Cubic& p) { return k < p.start; });
  if (after == pieces.begin()) return {nullptr, smile.left};
  const Cubic& piece = *(after - 1);
  if (piece.end >= high) return {&piece, 0};
  return {nullptr, smile.right};
}

Ranges ranges_of(const Smile& first, const Smile* second, bool outside) {
  std::vector<double> marks;
  double reach = first.backbone.reach();
  for (const Cubic& p : first.pieces) marks.push_back(p.start);
  if (!first.pieces.empty()) marks.push_back(first.pieces.back().end);
  if (second) {
    for (const Cubic& p : second->pieces) marks.push_back(p.start);
    if (!second->pieces.empty()) marks.push_back(second->pieces.back().end);
    reach = std::max(reach, second->backbone.reach());
  }
  std::sort(marks.begin(), marks.end());
  Ranges out{{}, reach, reach};
  if (!marks.empty()) {
    out.left_tail = std::max(reach, -marks.front());
    out.right_tail = std::max(reach, marks.back());
  }
  if (outside) {
    marks.insert(marks.begin(), -out.left_tail);
    marks.push_back(out.right_tail);
  }
  for (std::size_t i = 0; i + 1 < marks.size(); ++i) {
    if (!(marks[i] < marks[i + 1])) continue;
    out.stretches.push_back({marks[i], marks[i + 1], part_over(first, marks[i], marks[i + 1]),
                             second ? part_over(*second, marks[i], marks[i + 1]) : Part{}});
  }
  return out;
}

// Runs over the stretches, and over both tails as ranges of y = 1/|k| from 0.
template <class InStretch, class InTail>
void run(Search& search, const Ranges& ranges, bool tails, InStretch in_stretch, InTail in_tail) {
  for (const Stretch& s : ranges.stretches)
    search.over(
        {s.low, s.high}, [&](const Box& box) { return in_stretch(s, box); },
        [](double k) { return k; });
  if (!tails) return;
  for (const bool left : {true, false}) {
    const double most = affine_rounding::above(1 / (left ? ranges.left_tail : ranges.right_tail));
    search.over(
        {0, most}, [&](const Box& box) { return in_tail(left, box); },
        [&](double y) { return (left ? -1 : 1) / y; });
  }
}

// ---- Durrleman's function ----

// A smile as g needs it. In k: lead = 2w - k w' and unit = 1. In the tails, where w and w'' stand
// for y w and w'': lead = y (2w - k w') = 2 y w - w', and unit = y. Both give
//   n = lead^2 + w (2 w w'' - unit w'^2) - (w w')^2 / 4,
// which is 4 w^2 g, in the tails times y^2.
struct Turned {
  Form form;
  Affine lead, unit;
};

Turned turned(const Form& form, const Affine& k) {
  return {form, scaled(form.w, 2) - k * form.slope, 1.0};
}

Turned turned_tail(const Hyperbola& backbone, const Affine& y) {
  const Form form = backbone.tail(y);
  return {form, scaled(form.w, 2) - form.slope, y};
}

Form form_of(const Smile& smile, const Part& part, const Affine& k) {
  const Form w = smile.backbone.at(k);
  if (!part.piece) return {w.w + part.constant, w.slope, w.bend};
  const Form u = overlay_over(*part.piece, k);
  return {w.w + u.w, w.slope + u.slope, w.bend + u.bend};
}

Look look_at_g(const Affine& scaled_g, const Affine& size, const Affine& variance) {
  Look look{};
  // Nothing is worse.
  if (variance.upper_at_centre() <= 0) return {-kInfinity, -kInfinity, variance.c, true};
  look.least = variance.lower() > 0 ? scaled_g.lower() : -kInfinity;
  look.most = variance.lower_at_centre() > 0 ? scaled_g.upper_at_centre() : kInfinity;
  look.value = scaled_g.c / size.c;
  return look;
}

Look durrleman_of(const Turned& t) {
  const auto& [w, slope, bend] = t.form;
  const Affine n = square(t.lead) + w * (scaled(w * bend, 2) - t.unit * square(slope)) -
                   scaled(square(w * slope), 0.25);
  return look_at_g(n, scaled(square(w), 4), w);
}

// look(Turned) over the whole smile; over the pieces of its overlay alone if theorems tell of the
// rest.
template <class LookAt>
Search whole(const Smile& smile, bool by_theorem, std::int64_t budget, LookAt look) {
  Search search(budget);
  run(
      search, ranges_of(smile, nullptr, !by_theorem), !by_theorem,
      [&](const Stretch& stretch, const Box& box) {
        const Affine k = Affine::range(box.low, box.high);
        return look(turned(form_of(smile, stretch.first, k), k));
      },
      [&, left_tail = smile.tail(true), right_tail = smile.tail(false)](bool left, const Box& box) {
        return look(turned_tail(left ? left_tail : right_tail, Affine::range(box.low, box.high)));
      });
  return search;
}

Search butterfly(const Smile& smile, bool by_theorem, std::int64_t budget) {
  return whole(smile, by_theorem, budget, [](const Turned& t) { return durrleman_of(t); });
}

// ---- After the last slice ----

// With variance added, W >= w in place of w, n of Turned is
//   P(W) = P(w) + (W - w) turn + (W - w)^2 rise,
//   rise = 4 - w'^2 / 4 + 2 w'',  turn = 2 w rise - 4 k w' - w'^2,
// so that a smile free of butterflies stays so where rise and turn are not negative. In the tails
// turn stands for y turn, with y w for w.
Look growth_of(const Turned& t) {
  const auto& [w, slope, bend] = t.form;
  const Affine rise = 4.0 - scaled(square(slope), 0.25) + scaled(bend, 2);
  // 4 k w' = 4 (2 w - lead).
  const Affine turn = scaled(w * (rise - 4.0), 2) + scaled(t.lead, 4) - t.unit * square(slope);
  Look look{std::min(rise.lower(), turn.lower()),
            std::min(rise.upper_at_centre(), turn.upper_at_centre()), std::min(rise.c, turn.c)};
  // Neither condition is necessary: nothing is ever proved broken.
  if (std::isnan(rise.lower()) || std::isnan(turn.lower())) look.least = -kInfinity;
  look.most = kInfinity;
  return look;
}

// ---- Calendar ----

Look step_of(const Affine& step, double size) {
  return {step.lower(), step.upper_at_centre(), step.c / size};
}

Affine added(const Part& part, const Affine& k) {
  return part.piece ? overlay_over(*part.piece, k).w : Affine(part.constant);
}

// What a sum is, up to the rounding of adding up its parts.
Affine enclosed(const ExactSum& sum) {
  Affine out = sum.known() ? 0.0 : kInfinity;
  for (const double part : sum.parts()) out = out + part;
  return out;
}

// In the tails the step is that of the wings' slopes, known from the parameters to their last digit
// (of `wings`, left and right, half), and y times what is left. Wings as steep as one another touch
// at y = 0, where what is left has to tell.
Search calendar(const Smile& first, const Smile& second, const std::array<ExactSum, 2>& wings,
                bool by_theorem, std::int64_t budget) {
  Search search(budget);
  run(
      search, ranges_of(first, &second, !by_theorem), !by_theorem,
      [&](const Stretch& s, const Box& box) {
        const Affine k = Affine::range(box.low, box.high);
        const Affine step = step_at(first.backbone, second.backbone, k);
        return step_of(step + (added(s.second, k) - added(s.first, k)), 1);
      },
      [&](bool left, const Box& box) {
        const Affine y = Affine::range(box.low, box.high);
        const Affine rest = second.tail(left).past_slope(y) - first.tail(left).past_slope(y);
        const ExactSum& wing = wings[left ? 0 : 1];
        Look look = step_of(scaled(enclosed(wing), 0.5) + y * rest, box.centre());
        if (wing.not_negative() && rest.lower() >= 0) look.least = 0;
        return look;
      });
  return search;
}

// ---- Between two smiles, w = (1 - weight) w1 + weight w2 ----

Turned at_weight(const Turned& a, const Turned& b, double weight) {
  if (weight == 0) return a;
  if (weight == 1) return b;
  const Affine late = weight, early = 1.0 - late;
  const auto mix = [&](const Affine& x, const Affine& y) { return early * x + late * y; };
  return {{mix(a.form.w, b.form.w), mix(a.form.slope, b.form.slope), mix(a.form.bend, b.form.bend)},
          mix(a.lead, b.lead),
          a.unit};
}

// n of Turned is a polynomial of degree 4 in the weight. A polynomial is nowhere below the least of
// its Bernstein coefficients (G. Farin, Curves and Surfaces for CAGD, chapter 6), here over weights
// from a to b. With square brackets for coefficients, lead^2 = [p0 p1 p2], 2 w w'' - unit w'^2 =
// [e0 e1 e2], w^2 = [x0 x1 x2] and w'^2 = [y0 y1 y2]; products and degrees raised by the usual
// rules.
Look durrleman_between(const Turned& a, const Turned& b) {
  const auto& [wa, da, ha] = a.form;
  const auto& [wb, db, hb] = b.form;
  const Affine p0 = square(a.lead), p1 = a.lead * b.lead, p2 = square(b.lead);
  const Affine x0 = square(wa), x1 = wa * wb, x2 = square(wb);
  const Affine y0 = square(da), y1 = da * db, y2 = square(db);
  const Affine e0 = scaled(wa * ha, 2) - a.unit * y0, e1 = wa * hb + wb * ha - a.unit * y1,
               e2 = scaled(wb * hb, 2) - a.unit * y2;
  const Affine early = e0 + scaled(e1, 2), late = e2 + scaled(e1, 2);
  // Times 1, 4, 6, 4, 1, which are also their weights half way, up to the sum of 16.
  const std::array<Affine, 5> n{
      p0 + wa * e0 - scaled(x0 * y0, 0.25),
      scaled(p0 + p1, 2) + wa * early + wb * e0 - scaled(x0 * y1 + x1 * y0, 0.5),
      p0 + scaled(p1, 4) + p2 + wa * late + wb * early -
          scaled(x0 * y2 + scaled(x1 * y1, 4) + x2 * y0, 0.25),
      scaled(p1 + p2, 2) + wb * late + wa * e2 - scaled(x1 * y2 + x2 * y1, 0.5),
      p2 + wb * e2 - scaled(x2 * y2, 0.25)};
  const Affine middle = scaled(n[0] + n[1] + n[2] + n[3] + n[4], 0.0625);
  const Affine w = scaled(wa + wb, 0.5);
  Look look{kInfinity, middle.upper_at_centre(), middle.c / (4 * w.c * w.c)};
  constexpr std::array<double, 5> kShare{1, 0.25, 1.0 / 6, 0.25, 1};
  double lowest = kInfinity, highest = -kInfinity, reach = 0;
  for (std::size_t i = 0; i < n.size(); ++i) {
    const double least = kShare[i] * n[i].lower(), centre = kShare[i] * n[i].c;
    if (least < look.least || std::isnan(least)) look.least = least;  // then NaN stays
    if (centre < lowest) {
      lowest = centre;
      reach = kShare[i] * (std::abs(n[i].d) + n[i].e);
    }
    highest = std::max(highest, centre);
  }
  // Halve what the coefficient in the way varies with most.
  look.split_weight = lowest < 0 && highest - lowest > reach;
  return look;
}

Search between(const Smile& first, const Smile& second, bool outside, std::int64_t budget) {
  Search search(budget);
  const auto look = [](const Turned& a, const Turned& b, const Box& box) {
    return durrleman_between(at_weight(a, b, box.weight_low), at_weight(a, b, box.weight_high));
  };
  run(
      search, ranges_of(first, &second, outside), outside,
      [&](const Stretch& s, const Box& box) {
        const Affine k = Affine::range(box.low, box.high);
        return look(turned(form_of(first, s.first, k), k), turned(form_of(second, s.second, k), k),
                    box);
      },
      [&](bool left, const Box& box) {
        const Affine y = Affine::range(box.low, box.high);
        return look(turned_tail(first.tail(left), y), turned_tail(second.tail(left), y), box);
      });
  return search;
}

// ---- The surface ----

bool in_range(const surface::Surface& surface) {
  double before = 0;
  for (const auto& s : surface.slices) {
    const auto& p = s.backbone;
    if (!(s.year_fraction > before) || !std::isfinite(s.year_fraction)) return false;
    if (!(p.theta > 0) || !std::isfinite(p.theta) || !(std::abs(p.rho) < 1)) return false;
    // Half of psi is to be exact.
    if (!(p.psi == 0 || p.psi > 0x1p-1000) || !std::isfinite(p.psi)) return false;
    if (s.overlay.problem()) return false;
    before = s.year_fraction;
  }
  return !surface.slices.empty();
}

class Certifier {
 public:
  Certifier(const surface::Surface& surface, std::int64_t budget)
      : surface_(surface), budget_(budget) {
    smiles_.reserve(surface.slices.size());
    for (const auto& s : surface.slices)
      smiles_.push_back(Smile::of(Hyperbola::of(s.backbone), s.overlay));
  }

  Certificate run() {
    for (std::size_t i = 0; i < smiles_.size(); ++i) {
      slice(i);
      if (i + 1 < smiles_.size()) step(i);
      if (has_variance_rule(i)) note(Proof::between, i, time_between(i));
    }
    after_last();
    out_.certified = out_.findings.empty();
    return std::move(out_);
  }

  // Whether a time strictly after slice i and before the next has the rule.
  bool has_variance_rule(std::size_t i) const {
    return i + 1 < smiles_.size() && surface_.slices[i].to_next == surface::Between::variance;
  }

  Search time_between(std::size_t i) const {
    // Where the first smile is flat, w is a multiple, by the weight <= 1, of the second with a
    // constant added: theorem 4.3 again, and the argument of slice().
    const bool by_theorem = surface_.slices[i].backbone.psi == 0 &&
                            smiles_[i].ends_at_least(0, 0) && has_free_tails(i + 1);
    return between(smiles_[i], smiles_[i + 1], !by_theorem, budget_);
  }

 private:
  void note(Proof proof, std::size_t i, const Search& search) {
    out_.boxes += search.used;
    if (search.proved()) return;
    if (search.broken && search.positive_fails) proof = Proof::positive;
    out_.findings.push_back({proof, i, search.k, search.value, search.broken});
  }

  // Times before the first slice need no more than that slice: there w = a w1 with 0 < a <= 1, and
  //   4 w^2 g / a^2 = (2 w1 - k w1')^2 + a w1 (2 w1 w1'' - w1'^2) - a^2 (w1 w1')^2 / 4
  // is concave in a, a square at a = 0 and not negative at a = 1: not negative between. And w
  // grows.
  void slice(std::size_t i) {
    const auto& p = surface_.slices[i].backbone;
    for (const double sign : {-1.0, 1.0}) {
      // Lee 2004: g tends to 1/4 - m^2 / 16 in a wing of slope m = psi (1 +- rho) / 2.
      if (!wing_room(p, sign).negative()) continue;
      const double m = 0.5 * p.psi * (1 + sign * p.rho);
      out_.findings.push_back(
          {Proof::butterfly, i, sign * kInfinity, 0.25 * (1 - 0.25 * m * m), true});
      return;
    }
    note(Proof::butterfly, i, butterfly(smiles_[i], has_free_tails(i), budget_));
  }

  // Whether a slice is free of butterflies off its overlay, with any variance added, by theorems
  // 4.2 and 4.3.
  bool has_free_tails(std::size_t i) const {
    const auto& p = surface_.slices[i].backbone;
    const Smile& smile = smiles_[i];
    // A constant, if positive: the rounded sum has the sign of the exact one.
    if (p.psi == 0) return p.theta + std::min(smile.left, smile.right) > 0;
    return meets_b(p) && smile.ends_at_least(0, 0);
  }

  void step(std::size_t i) {
    const auto& a = surface_.slices[i].backbone;
    const auto& b = surface_.slices[i + 1].backbone;
    const std::array<ExactSum, 2> wings{wing_step(a, b, -1), wing_step(a, b, 1)};
    // The wing with the smaller slope ends below the other.
    Finding worst{Proof::calendar, i, 0, kInfinity, true};
    for (const double sign : {-1.0, 1.0}) {
      if (!wings[sign < 0 ? 0 : 1].negative()) continue;
      const double fall = 0.5 * (b.psi * (1 + sign * b.rho) - a.psi * (1 + sign * a.rho));
      if (fall < worst.value) worst = {Proof::calendar, i, sign * kInfinity, fall, true};
    }
    if (worst.k != 0) {
      out_.findings.push_back(worst);
      return;
    }
    const bool by_theorem =
        flat_step(i) ||
        (meets_c(a, b) && smiles_[i + 1].ends_at_least(smiles_[i].left, smiles_[i].right));
    note(Proof::calendar, i, calendar(smiles_[i], smiles_[i + 1], wings, by_theorem, budget_));
  }

  // Whether both smiles are constants off their overlays, in the right order.
  bool flat_step(std::size_t i) const {
    const auto &a = surface_.slices[i].backbone, &b = surface_.slices[i + 1].backbone;
    const auto ordered = [&](double before, double after) {
      return ExactSum().add(b.theta).add(after).add(-a.theta).add(-before).not_negative();
    };
    return a.psi == 0 && b.psi == 0 && ordered(smiles_[i].left, smiles_[i + 1].left) &&
           ordered(smiles_[i].right, smiles_[i + 1].right);
  }

  void after_last() {
    const std::size_t i = smiles_.size() - 1;
    note(Proof::after, i, whole(smiles_[i], has_free_tails(i), budget_, growth_of));
  }

  const surface::Surface& surface_;
  std::int64_t budget_;
  std::vector<Smile> smiles_;
  Certificate out_{false, {}, 0};
};

}  // namespace

std::string_view word(Proof proof) {
  switch (proof) {
    case Proof::parameters: return "parameters";
    case Proof::positive: return "positive";
    case Proof::butterfly: return "butterfly";
    case Proof::calendar: return "calendar";
    case Proof::between: return "between";
    case Proof::after: return "after";
  }
  return "";
}

std::optional<std::string> CertificateOptions::problem() const {
  if (most_boxes < 1) return fmt::format("most_boxes = {}, must be >= 1", most_boxes);
  return std::nullopt;
}

Certificate certify(const surface::Surface& surface, const CertificateOptions& options) {
  if (!in_range(surface) || options.problem())
    return {false, {{Proof::parameters, 0, 0, 0, false}}, 0};
  return Certifier(surface, options.most_boxes).run();
}

surface::Surface with_proved_rules(surface::Surface surface, const CertificateOptions& options) {
  const bool usable = in_range(surface) && !options.problem();
  std::vector<std::size_t> unproved;
  if (usable) {
    const Certifier certifier(surface, options.most_boxes);
    for (std::size_t i = 0; i < surface.slices.size(); ++i)
      if (certifier.has_variance_rule(i) && !certifier.time_between(i).proved())
        unproved.push_back(i);
  }
  for (std::size_t i = 0; i < surface.slices.size(); ++i)
    if (!usable || std::find(unproved.begin(), unproved.end(), i) != unproved.end())
      surface.slices[i].to_next = surface::Between::price;
  return surface;
}

Certificate certify_smile(const Hyperbola& backbone, const surface::Overlay& overlay,
                          const CertificateOptions& options) {
  if (!(backbone.stretch >= 0) || overlay.problem() || options.problem())
    return {false, {{Proof::parameters, 0, 0, 0, false}}, 0};
  const Search search = butterfly(Smile::of(backbone, overlay), false, options.most_boxes);
  Certificate out{search.proved(), {}, search.used};
  if (search.proved()) return out;
  const Proof proof = search.broken && search.positive_fails ? Proof::positive : Proof::butterfly;
  out.findings.push_back({proof, 0, search.k, search.value, search.broken});
  return out;
}

}  // namespace duskgrid::arbitrage
