#include "surface/slice_model.h"

#include <algorithm>
#include <cmath>

namespace duskgrid::surface {
namespace {

using Eigen::Index;
using Eigen::Map;
using Eigen::Vector4d;
using Eigen::VectorXd;

// A quote counts as well inside its spread up to this share of the way from mid to bid or ask.
constexpr double kWellInside = 0.8;
// What a mid is credited with as its own error, root mean square, in half-spreads: the spread is
// three of these either way.
constexpr double kMidError = 1.0 / 3;
// Past this many half-spreads a quote pulls with constant force, and past kStray of them it does
// not count, unless quotes like it are common.
constexpr double kRobust = 1.5;
constexpr double kStray = 3;
constexpr double kMostStrays = 0.1;
// Knot intervals beyond the quotes on either side, and their width in those before.
constexpr int kLanding = 2;
constexpr double kLandingWidth = 1.5;
constexpr int kProbesAnInterval = 6;

double dot(const ScaledBasis& b, const std::array<double, 4>& part, const VectorXd& x) {
  return part[0] * x[b.first] + part[1] * x[b.first + 1] + part[2] * x[b.first + 2] +
         part[3] * x[b.first + 3];
}

// Knots are even in this coordinate: close near the money, where smiles turn, wide in the wings.
double bend(double z) { return std::copysign(2 * (std::sqrt(1 + std::abs(z)) - 1), z); }
double unbend(double y) {
  const double r = 1 + 0.5 * std::abs(y);
  return std::copysign(r * r - 1, y);
}

}  // namespace

Conditioned condition_at(Condition condition, const ScaledSmile& p, double z, double s0) {
  const double lean = p.slope / p.w, square = s0 * s0;
  const double q = 0.5 * z * lean;
  switch (condition) {
    case Condition::positive: return {p.w, 1, 0, 0};
    case Condition::butterfly:
      return {(1 - q) * (1 - q) - 0.25 * p.slope * lean - square * p.slope * p.slope / 16 +
                  0.5 * p.curvature,
              2 * (1 - q) * q / p.w + 0.25 * lean * lean,
              -(1 - q) * z / p.w - 0.5 * lean - 0.125 * square * p.slope, 0.5};
    case Condition::later_bend:
      return {1 - square * p.slope * p.slope / 16 + 0.5 * p.curvature, 0, -0.125 * square * p.slope,
              0.5};
    case Condition::later_turn:
      return {1 - q - 0.125 * p.slope * lean - square * p.slope * p.slope / 16 + 0.5 * p.curvature,
              q / p.w + 0.125 * lean * lean,
              -0.5 * z / p.w - 0.25 * lean - 0.125 * square * p.slope, 0.5};
  }
  return {};
}

SliceModel::SliceModel(const FitSlice& data, const SliceParameters& shape,
                       const FitOptions& options)
    : shape_(shape), backbone_(shape), s0_(std::sqrt(shape.theta)), t_(data.year_fraction) {
  place_knots(data, options.overlay.most_coefficients);
  quotes_.reserve(data.quotes.size());
  for (const auto& q : data.quotes) add_quote(q, options.backbone.least_half_spread);
}

void SliceModel::place_knots(const FitSlice& data, int most) {
  constexpr int kLeast = 6;
  const auto [first, last] =
      std::minmax_element(data.quotes.begin(), data.quotes.end(),
                          [](const FitQuote& a, const FitQuote& b) { return a.k < b.k; });
  quoted_low_ = first->k / s0_;
  quoted_high_ = last->k / s0_;
  const auto quotes = static_cast<int>(std::min<std::size_t>(data.quotes.size(), 1000));
  const int coefficients = std::clamp(quotes / 2 + kLeast, kLeast, std::max(most, kLeast));
  const int between = coefficients + 1 - 2 * kLanding;
  constexpr double kNarrowest = 0.2;
  const double middle = 0.5 * (bend(quoted_low_) + bend(quoted_high_));
  const double half = 0.5 * std::max(bend(quoted_high_) - bend(quoted_low_), kNarrowest);
  const double low = middle - half, high = middle + half;
  const double width = (high - low) / between;
  const double landing = kLandingWidth * std::max(width, 1.5 * kNarrowest);
  for (int i = -kLanding; i < 0; ++i) knots_.push_back(unbend(low + landing * i));
  for (int i = 0; i < between; ++i) knots_.push_back(unbend(low + width * i));
  for (int i = 0; i <= kLanding; ++i) knots_.push_back(unbend(high + landing * i));
}

ScaledBasis SliceModel::basis_at_z(double z) const {
  const BasisPoint p = basis_at(knots_, z);
  return {static_cast<Index>(p.first), p.value, p.slope, p.curvature};
}

ScaledSmile SliceModel::scaled(const SliceParameters& parameters, double z) const {
  const SmilePoint p = smile_at(parameters, s0_ * z);
  return {p.w / (s0_ * s0_), p.dw_dk / s0_, p.d2w_dk2};
}

Probe SliceModel::probe_at(double k) const {
  return {k, k / s0_, basis_at_z(k / s0_), scaled(backbone_, k / s0_)};
}

ScaledSmile SliceModel::smile(const Probe& p, const VectorXd& x) const {
  return {p.backbone.w + dot(p.basis, p.basis.value, x),
          p.backbone.slope + dot(p.basis, p.basis.slope, x),
          p.backbone.curvature + dot(p.basis, p.basis.curvature, x)};
}

void SliceModel::add_quote(const FitQuote& q, double least_half_spread) {
  const double h = std::max(q.half_spread, least_half_spread);
  const double z = q.k / s0_;
  const double scale = s0_ * s0_ / (2 * q.vol * t_ * h);
  const auto from_mid = [&](double vol) { return (vol - q.vol) * (vol + q.vol) / (2 * q.vol * h); };
  // A spread too narrow to be credited is as wide as the least one.
  const double widening = h - q.half_spread;
  const double from_zero = from_mid(0);
  quotes_.push_back({.basis = basis_at_z(z),
                     .k = q.k,
                     .scale = scale,
                     .from_zero = from_zero,
                     .offset = scale * scaled(backbone_, z).w + from_zero,
                     .low = from_mid(std::max(0.0, q.vol_bid - widening)),
                     .high = from_mid(q.vol_ask + widening),
                     .weight = 1,
                     .stray = false});
}

double SliceModel::misfit(const QuoteRow& q, const VectorXd& x) const {
  return q.offset + q.scale * dot(q.basis, q.basis.value, x);
}

// Zero where rounding leaves the system without a factor.
VectorXd SliceModel::smooth() const {
  const Eigen::LLT<Eigen::MatrixXd> factor(hessian_);
  if (factor.info() != Eigen::Success) return VectorXd::Zero(size());
  return factor.solve(-gradient_);
}

SliceModel::Discrepancy SliceModel::discrepancy(const VectorXd& x) const {
  Discrepancy out{0, 0};
  for (const QuoteRow& q : quotes_) {
    if (q.stray) continue;
    const double r = misfit(q, x);
    const double over = std::max(r - kWellInside * q.high, kWellInside * q.low - r);
    out.over += std::clamp(over, 0.0, kStray);
    out.square += std::min(r * r, kStray * kStray) / static_cast<double>(quotes_.size());
  }
  return out;
}

std::size_t SliceModel::outside(const VectorXd& x) const {
  return static_cast<std::size_t>(
      std::count_if(quotes_.begin(), quotes_.end(), [&](const QuoteRow& q) {
        const double r = misfit(q, x);
        return !q.stray && (r > q.high || r < q.low);
      }));
}

bool SliceModel::met_by_backbone() const {
  const Discrepancy d = discrepancy(VectorXd::Zero(size()));
  return d.over <= most_.over && d.square <= most_.square;
}

// The integral of the squared third derivative of W less that of the shape (of the wings' backbone
// where there are no quotes); third derivatives of splines are constant between knots.
void SliceModel::measure_roughness() {
  roughness_.setZero(size(), size());
  roughness_pull_.setZero(size());
  for (std::size_t i = 0; i + 1 < knots_.size(); ++i) {
    const double width = knots_[i + 1] - knots_[i];
    const double a = knots_[i] + 0.25 * width, b = knots_[i] + 0.75 * width;
    const ScaledBasis at_a = basis_at_z(a), at_b = basis_at_z(b);
    const Vector4d third =
        (Map<const Vector4d>(at_b.curvature.data()) - Map<const Vector4d>(at_a.curvature.data())) /
        (b - a);
    roughness_.block<4, 4>(at_a.first, at_a.first).noalias() += width * third * third.transpose();
    if (i < kLanding || i + 1 + kLanding >= knots_.size()) continue;
    const auto gap = [&](double z) {
      return scaled(backbone_, z).curvature - scaled(shape_, z).curvature;
    };
    roughness_pull_.segment<4>(at_a.first) += width * (gap(b) - gap(a)) / (b - a) * third;
  }
}

void SliceModel::weigh_quotes() {
  misfit_.setZero(size(), size());
  misfit_pull_.setZero(size());
  for (const QuoteRow& q : quotes_) {
    const Map<const Vector4d> a(q.basis.value.data());
    const double pull = q.weight * q.scale;
    misfit_.block<4, 4>(q.basis.first, q.basis.first).noalias() +=
        pull * q.scale * a * a.transpose();
    misfit_pull_.segment<4>(q.basis.first).noalias() += pull * q.offset * a;
  }
}

void SliceModel::assemble(double lambda) {
  lambda_ = lambda;
  hessian_ = lambda * roughness_ + misfit_;
  gradient_ = lambda * roughness_pull_ + misfit_pull_;
}

void SliceModel::find_strays(const VectorXd& x) {
  std::size_t strays = 0;
  for (QuoteRow& q : quotes_) {
    q.stray = std::abs(misfit(q, x)) > kStray;
    strays += q.stray ? 1 : 0;
  }
  if (static_cast<double>(strays) <= kMostStrays * static_cast<double>(quotes_.size())) return;
  for (QuoteRow& q : quotes_) q.stray = false;
}

void SliceModel::choose_roughness(bool finely) {
  constexpr double kLightest = 1e-3, kHeaviest = 1e6, kStep = 8, kFinest = 1.1;
  constexpr int kReweightings = 10;
  measure_roughness();
  for (QuoteRow& q : quotes_) {
    q.weight = 1;
    q.stray = false;
  }
  weigh_quotes();
  assemble(kLightest);
  VectorXd x = smooth();
  for (int i = 0; i < kReweightings; ++i) {
    bool robust = false;
    for (QuoteRow& q : quotes_) {
      const double r = std::abs(misfit(q, x));
      q.weight = r > kRobust ? kRobust / r : 1;
      robust = robust || r > kRobust;
    }
    weigh_quotes();
    assemble(kLightest);
    if (!robust) break;
    x = smooth();
  }
  find_strays(x);
  constexpr double kSlack = 0.02;
  const Discrepancy least = discrepancy(x);
  most_ = {(1 + kSlack) * least.over + kSlack,
           std::max(kMidError * kMidError, (1 + kSlack) * least.square)};
  const auto meets = [&](double lambda) {
    assemble(lambda);
    const Discrepancy d = discrepancy(smooth());
    return d.over <= most_.over && d.square <= most_.square;
  };
  double light = kLightest, heavy = kHeaviest;
  while (heavy > light * kStep && !meets(heavy / kStep)) heavy /= kStep;
  light = std::max(light, heavy / kStep);
  while (finely && heavy > kFinest * light) {
    const double middle = std::sqrt(light * heavy);
    (meets(middle) ? light : heavy) = middle;
  }
  assemble(light);
}

std::array<double, 2> SliceModel::end_slopes() const {
  const VectorXd x = smooth();
  return {s0_ * smile(probe_at(s0_ * quoted_low_), x).slope,
          s0_ * smile(probe_at(s0_ * quoted_high_), x).slope};
}

void SliceModel::rebase(const SliceParameters& wings) {
  backbone_ = wings;
  for (QuoteRow& q : quotes_) q.offset = q.scale * scaled(backbone_, q.k / s0_).w + q.from_zero;
}

void SliceModel::roughen(double factor) { assemble(factor * lambda_); }

std::vector<double> SliceModel::places() const {
  constexpr int kTail = 24;
  constexpr double kNearest = 0.02, kRatio = 1.6;  // of the knots' span; the last at 1,000 spans
  const double span = knots_.back() - knots_.front();
  std::vector<double> out;
  for (int i = kTail; i-- > 0;)
    out.push_back(s0_ * (knots_.front() - kNearest * span * std::pow(kRatio, i)));
  for (std::size_t i = 0; i + 1 < knots_.size(); ++i)
    for (int p = 0; p < kProbesAnInterval; ++p)
      out.push_back(s0_ * (knots_[i] + (knots_[i + 1] - knots_[i]) * p / kProbesAnInterval));
  out.push_back(s0_ * knots_.back());
  for (int i = 0; i < kTail; ++i)
    out.push_back(s0_ * (knots_.back() + kNearest * span * std::pow(kRatio, i)));
  return out;
}

double SliceModel::density(const Probe& p, const VectorXd& x) const {
  const ScaledSmile at = smile(p, x);
  if (!(at.w > 0)) return 0;
  const double root = std::sqrt(at.w), d2 = -p.z / root - 0.5 * s0_ * root;
  return condition_at(Condition::butterfly, at, p.z, s0_).value / root * std::exp(-0.5 * d2 * d2);
}

Overlay SliceModel::overlay(const VectorXd& x) const {
  Overlay out;
  for (const double z : knots_) out.knots.push_back(s0_ * z);
  for (const double c : x) out.coefficients.push_back(s0_ * s0_ * c);
  return out;
}

}  // namespace duskgrid::surface
