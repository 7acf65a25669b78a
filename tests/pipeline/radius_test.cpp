#include "pipeline/radius.h"

#include <catch2/catch.hpp>
#include <cmath>

#include "core/chi_square.h"

using namespace kedge;
using namespace kedge::pipeline;

TEST_CASE("a circular Gaussian has the Rayleigh radius") {
  // NIST/SEMATECH e-Handbook: 95 % at 2.4477 sigma, 50 % at 1.1774 sigma.
  for (const double sigma : {0.01, 1.0, 40.0}) {
    const std::array<Component, 1> one = {Component{Vector2::Zero(), Matrix2::Identity() * sigma * sigma, 1.0}};
    CHECK(radius_holding(0.95, one) == Approx(2.4477 * sigma).epsilon(2e-3));
    CHECK(radius_holding(0.50, one) == Approx(1.1774 * sigma).epsilon(2e-3));
  }
}

TEST_CASE("a very elongated Gaussian has the one-dimensional radius of its long axis") {
  Matrix2 covariance;
  covariance << 1.0, 0.0, 0.0, 1e-8;
  const Eigen::Rotation2Dd turn(0.7);
  const std::array<Component, 1> one = {
      Component{Vector2::Zero(), turn.toRotationMatrix() * covariance * turn.toRotationMatrix().transpose(), 1.0}};
  // Two-sided 95 % of a normal distribution: 1.95996 sigma (the root of the chi-square quantile, 3.841).
  CHECK(radius_holding(0.95, one) == Approx(std::sqrt(3.841)).epsilon(2e-3));
}

TEST_CASE("the share within a radius agrees with counting on a fine grid") {
  Component component;
  component.offset_m = Vector2(3.0, -1.5);
  component.covariance_m2 << 4.0, 1.2, 1.2, 0.8;
  const Matrix2 information = component.covariance_m2.inverse();
  const double scale = 1.0 / (2.0 * M_PI * std::sqrt(component.covariance_m2.determinant()));
  for (const double radius : {1.0, 2.5, 4.0, 8.0}) {
    double sum = 0.0;
    constexpr double step = 0.01;
    for (double x = -radius + step / 2; x < radius; x += step) {
      for (double y = -radius + step / 2; y < radius; y += step) {
        if (x * x + y * y > radius * radius) continue;
        const Vector2 d = Vector2(x, y) - component.offset_m;
        sum += std::exp(-0.5 * d.dot(information * d));
      }
    }
    CHECK(share_within(radius, component) == Approx(sum * scale * step * step).margin(2e-4));
  }
}

TEST_CASE("two mirror positions give a radius that reaches the other one") {
  fusion::Estimate estimate;
  estimate.phase = fusion::Phase::twofold;
  estimate.lead.position_covariance_m2 = Matrix3::Identity() * 0.01;
  estimate.mirror = estimate.lead;
  estimate.mirror.position_m = Vector3(40.0, 0.0, 0.0);
  estimate.lead.probability = estimate.mirror.probability = 0.5;
  // With half the weight at 40 m the circle must hold 90 % of that half, just beyond its middle:
  // one-sided 90 % of a normal distribution is 1.2816 sigma.
  CHECK(radius_95(estimate) == Approx(40.0 + 1.2816 * 0.1).epsilon(2e-3));
  estimate.mirror.probability = 0.01;
  estimate.lead.probability = 0.99;
  CHECK(radius_95(estimate) < 0.35);
}

TEST_CASE("sigma-sized and vanishing covariances stay finite") {
  const std::array<Component, 1> nothing = {Component{Vector2::Zero(), Matrix2::Zero(), 1.0}};
  CHECK(std::isfinite(radius_holding(0.95, nothing)));
}
