#include "pricing/invert_batch.h"

#include <algorithm>
#include <cmath>

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "pricing/invert_batch.cc"
#include <hwy/foreach_target.h>
// After foreach_target, which compiles this file once a target.
#include <hwy/highway.h>

#include "pricing/invert_kernel-inl.h"

HWY_BEFORE_NAMESPACE();
namespace duskgrid::pricing {
namespace HWY_NAMESPACE {

using Tag = hn::ScalableTag<double>;

// Loads of the last few elements repeat the first of them in the lanes past the end.
HWY_INLINE std::size_t load_part(const double* from, std::size_t left, double* lanes,
                                 std::size_t width) {
  const std::size_t n = left < width ? left : width;
  for (std::size_t i = 0; i < width; ++i) lanes[i] = from[i < n ? i : 0];
  return n;
}

void normalised(const double* x, const double* beta, const double* bound, std::size_t count,
                double* out) {
  const Tag d;
  const std::size_t width = hn::Lanes(d);
  HWY_ALIGN double px[HWY_MAX_BYTES / 8], pb[HWY_MAX_BYTES / 8], pe[HWY_MAX_BYTES / 8];
  for (std::size_t i = 0; i < count; i += width) {
    const std::size_t n = load_part(x + i, count - i, px, width);
    load_part(beta + i, count - i, pb, width);
    load_part(bound + i, count - i, pe, width);
    hn::Store(invert(d, hn::Load(d, px), hn::Load(d, pb), hn::Load(d, pe)), d, px);
    for (std::size_t j = 0; j < n; ++j) out[i + j] = px[j];
  }
}

// Statuses as numbers in the order of VolStatus.
void priced(const ColumnTerms& terms, const double* strikes, const double* signs,
            const double* prices, std::size_t count, double* vols, double* statuses) {
  const Tag d;
  const std::size_t width = hn::Lanes(d);
  const Shared<Tag> shared(d, terms.forward, terms.discount_factor, terms.year_fraction);
  HWY_ALIGN double pk[HWY_MAX_BYTES / 8], ps[HWY_MAX_BYTES / 8], pp[HWY_MAX_BYTES / 8];
  for (std::size_t i = 0; i < count; i += width) {
    const std::size_t n = load_part(strikes + i, count - i, pk, width);
    load_part(signs + i, count - i, ps, width);
    load_part(prices + i, count - i, pp, width);
    auto status = hn::Zero(d);
    const auto vol =
        invert_prices(d, shared, hn::Load(d, pk), hn::Load(d, ps), hn::Load(d, pp), status);
    hn::Store(vol, d, pk);
    hn::Store(status, d, ps);
    for (std::size_t j = 0; j < n; ++j) {
      vols[i + j] = pk[j];
      statuses[i + j] = ps[j];
    }
  }
}

}  // namespace HWY_NAMESPACE
}  // namespace duskgrid::pricing
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace duskgrid::pricing {
namespace {

HWY_EXPORT(normalised);
HWY_EXPORT(priced);

// The columns are worked through in blocks that stay in the first cache.
constexpr std::size_t kBlock = 256;

}  // namespace

void implied_vols(const ColumnTerms& terms, const PriceColumns& columns, std::span<double> vols,
                  std::span<VolStatus> statuses) {
  const auto positive = [](double v) { return std::isfinite(v) && v > 0; };
  if (!positive(terms.forward) || !positive(terms.discount_factor) ||
      !positive(terms.year_fraction)) {
    std::fill(vols.begin(), vols.end(), 0.0);
    std::fill(statuses.begin(), statuses.end(), VolStatus::not_finite);
    return;
  }
  double signs[kBlock], words[kBlock];
  for (std::size_t at = 0; at < vols.size(); at += kBlock) {
    const std::size_t n = std::min(kBlock, vols.size() - at);
    for (std::size_t i = 0; i < n; ++i)
      signs[i] = columns.put_calls[at + i] == quotes::PutCall::call ? 1.0 : -1.0;
    HWY_DYNAMIC_DISPATCH(priced)
    (terms, columns.strikes.data() + at, signs, columns.prices.data() + at, n, vols.data() + at,
     words);
    for (std::size_t i = 0; i < n; ++i)
      statuses[at + i] = static_cast<VolStatus>(static_cast<int>(words[i]));
  }
}

void invert_normalised(std::span<const double> x, std::span<const double> beta,
                       std::span<double> total_vols) {
  double bounds[kBlock];
  for (std::size_t at = 0; at < x.size(); at += kBlock) {
    const std::size_t n = std::min(kBlock, x.size() - at);
    for (std::size_t i = 0; i < n; ++i) bounds[i] = std::exp(0.5 * x[at + i]);
    HWY_DYNAMIC_DISPATCH(normalised)
    (x.data() + at, beta.data() + at, bounds, n, total_vols.data() + at);
  }
}

std::vector<std::string> batch_targets() {
  hwy::SetSupportedTargetsForTest(0);
  std::vector<std::string> names;
  // Wider targets have lower bits.
  for (std::int64_t bits = hwy::SupportedTargets() & HWY_TARGETS; bits != 0; bits &= bits - 1)
    names.emplace_back(hwy::TargetName(bits & -bits));
  return names;
}

void use_batch_target(const std::string& name) {
  hwy::SetSupportedTargetsForTest(0);
  const std::int64_t all = hwy::SupportedTargets();
  for (std::int64_t bits = all & HWY_TARGETS; bits != 0; bits &= bits - 1) {
    const std::int64_t target = bits & -bits;
    if (name == hwy::TargetName(target)) hwy::SetSupportedTargetsForTest(target);
  }
  hwy::GetChosenTarget().Update(hwy::SupportedTargets());
}

}  // namespace duskgrid::pricing
#endif  // HWY_ONCE
