// The circle that holds 95 % of where a tag may be.
//
// A covariance is honest only until people read it: an elongated ellipse, or two mirror positions, needs
// one figure that does not flatter. This is the radius about the reported position that contains the
// stated share of the whole distribution.
#pragma once

#include <Eigen/Core>
#include <array>
#include <cstddef>
#include <span>

#include "core/rotation.h"
#include "fusion/estimate.h"

namespace kedge::pipeline {

/// One Gaussian component in the level plane, its mean relative to the circle's centre.
struct Component {
  Vector2 offset_m = Vector2::Zero();
  Matrix2 covariance_m2 = Matrix2::Identity();
  double weight = 1.0;
};

/// Probability that a draw from the component falls within `radius_m` of the centre, to about 1e-6: the
/// two-dimensional integral reduced to one dimension along the ellipse's long axis.
[[nodiscard]] double share_within(double radius_m, const Component& component);

/// Smallest radius in metres that holds `share` of the mixture (weights summing to 1), to 0.1 %.
/// Covariances must be positive definite.
[[nodiscard]] double radius_holding(double share, std::span<const Component> components);

/// The 95 % radius about the reported position of an estimate in phase twofold or single.
[[nodiscard]] double radius_95(const fusion::Estimate& estimate);

}  // namespace kedge::pipeline
