#include "surface/slice_model.h"

#include <gtest/gtest.h>

#include <cmath>

namespace duskgrid::surface {
namespace {

FitSlice skewed(int count) {
  FitSlice out{0.25, {}};
  for (int i = 0; i < count; ++i) {
    const double k = std::lerp(-0.4, 0.3, i / (count - 1.0));
    out.quotes.push_back({k, 0.2 - 0.15 * k + 0.2 * k * k, 0.002});
  }
  return out;
}
const SliceParameters kShape{0.01, -0.4, 0.1};

TEST(ConditionAt, ButterflyIsDurrlemansFunction) {
  const SliceModel model(skewed(20), kShape, {});
  for (const double k : {-0.5, -0.1, 0.0, 0.2}) {
    const Probe p = model.probe_at(k);
    const auto c = condition_at(Condition::butterfly, p.backbone, p.z, model.s0());
    // A few products of numbers of order 1.
    EXPECT_NEAR(c.value, durrleman(smile_at(kShape, k), k), 1e-13) << k;
  }
}

TEST(ConditionAt, DerivativesAreThoseOfTheValue) {
  constexpr double kStep = 1e-5,
                   kSquared = 1e-7;  // central differences: h^2 times third derivatives
  const ScaledSmile at{1.3, -0.4, 0.6};
  for (const auto c :
       {Condition::positive, Condition::butterfly, Condition::later_bend, Condition::later_turn})
    for (const double z : {-3.0, 0.5}) {
      const auto value = [&](double w, double slope, double curvature) {
        return condition_at(c, {at.w + w, at.slope + slope, at.curvature + curvature}, z, 0.3)
            .value;
      };
      const auto by = condition_at(c, at, z, 0.3);
      const auto slope = [](double up, double down) { return (up - down) / (2 * kStep); };
      EXPECT_NEAR(by.by_w, slope(value(kStep, 0, 0), value(-kStep, 0, 0)), kSquared);
      EXPECT_NEAR(by.by_slope, slope(value(0, kStep, 0), value(0, -kStep, 0)), kSquared);
      EXPECT_NEAR(by.by_curvature, slope(value(0, 0, kStep), value(0, 0, -kStep)), kSquared);
    }
}

TEST(SliceModel, ChoosingTwiceGivesTheSame) {
  FitSlice data = skewed(30);
  data.quotes[7].vol += 0.05;  // a stray, so that weights differ from 1
  data.quotes[7].vol_bid += 0.05;
  data.quotes[7].vol_ask += 0.05;
  SliceModel model(data, kShape, {});
  model.choose_roughness(true);
  const Eigen::VectorXd once = model.smooth();
  model.choose_roughness(true);
  EXPECT_EQ(model.smooth(), once);
}

TEST(SliceModel, StrayIsLeftOutAndOthersAreMet) {
  FitSlice data = skewed(30);
  data.quotes[12].vol += 0.05;
  data.quotes[12].vol_bid += 0.05;
  data.quotes[12].vol_ask += 0.05;
  SliceModel model(data, kShape, {});
  model.choose_roughness(true);
  const Eigen::VectorXd x = model.smooth();
  EXPECT_EQ(model.outside(x), 0U);  // strays aside
  for (std::size_t i = 0; i < data.quotes.size(); ++i) EXPECT_EQ(model.quotes()[i].stray, i == 12);
}

TEST(SliceModel, OverlayInZIsTheOverlayInK) {
  SliceModel model(skewed(30), kShape, {});
  model.choose_roughness(true);
  const Eigen::VectorXd x = model.smooth();
  const Overlay overlay = model.overlay(x);
  for (const double k : {-0.9, -0.35, 0.0, 0.21, 0.8}) {
    const OverlayPoint u = overlay_at(overlay, k);
    const Probe p = model.probe_at(k);
    const double w = model.total_variance(model.smile(p, x));
    EXPECT_NEAR(w, smile_at(kShape, k).w + u.u, 1e-14) << k;  // rounding of w < 1
  }
}

}  // namespace
}  // namespace duskgrid::surface
