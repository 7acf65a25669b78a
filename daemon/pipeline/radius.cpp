#include "pipeline/radius.h"

#include <Eigen/Eigenvalues>
#include <algorithm>
#include <cmath>
#include <numbers>

#include "core/assert.h"

namespace kedge::pipeline {
namespace {

// Five-point Gauss-Legendre (Abramowitz and Stegun 1964, table 25.4), applied to equal panels.
constexpr std::array<double, 5> nodes = {-0.906179845938664, -0.538469310105683, 0.0, 0.538469310105683,
                                         0.906179845938664};
constexpr std::array<double, 5> weights = {0.236926885056189, 0.478628670499366, 0.568888888888889, 0.478628670499366,
                                           0.236926885056189};
constexpr int panels = 12;

/// A component turned to its own axes: x along the longer one.
struct Principal {
  double offset_x_m;
  double offset_y_m;
  double sigma_x_m;
  double sigma_y_m;
  double weight;
};

Principal principal(const Component& component) {
  Eigen::SelfAdjointEigenSolver<Matrix2> axes;
  axes.computeDirect(component.covariance_m2);
  const Vector2 offset = axes.eigenvectors().transpose() * component.offset_m;
  // A variance below a square micrometre is rounding, not knowledge.
  const auto sigma = [](double variance) { return std::sqrt(std::max(variance, 1e-12)); };
  return {offset(1), offset(0), sigma(axes.eigenvalues()(1)), sigma(axes.eigenvalues()(0)), component.weight};
}

double share_within(double radius_m, const Principal& p) {
  // Beyond 6 sigma lies less than 2e-9 of the distribution.
  const double reach = 6.0 * p.sigma_x_m;
  const double low = std::max(-radius_m, p.offset_x_m - reach);
  const double high = std::min(radius_m, p.offset_x_m + reach);
  if (low >= high) return 0.0;
  // x = radius sin(phi) removes the square-root ends of the chord's half-length.
  const double phi_low = std::asin(std::clamp(low / radius_m, -1.0, 1.0));
  const double phi_high = std::asin(std::clamp(high / radius_m, -1.0, 1.0));
  const double step = (phi_high - phi_low) / panels;
  const double scale_y = 1.0 / (p.sigma_y_m * std::numbers::sqrt2);
  double sum = 0.0;
  for (int panel = 0; panel < panels; ++panel) {
    const double middle = phi_low + (panel + 0.5) * step;
    for (std::size_t i = 0; i < nodes.size(); ++i) {
      const double phi = middle + 0.5 * step * nodes[i];
      const double half_chord = radius_m * std::cos(phi);
      const double z = (radius_m * std::sin(phi) - p.offset_x_m) / p.sigma_x_m;
      const double within =
          std::erf((half_chord - p.offset_y_m) * scale_y) + std::erf((half_chord + p.offset_y_m) * scale_y);
      sum += weights[i] * std::exp(-0.5 * z * z) * within * half_chord;
    }
  }
  return sum * 0.5 * step * 0.5 / (p.sigma_x_m * std::sqrt(2.0 * std::numbers::pi));
}

Component component_of(const fusion::Mode& mode, const fusion::Mode& about, double weight) {
  return {(mode.position_m - about.position_m).head<2>(), mode.position_covariance_m2.topLeftCorner<2, 2>(), weight};
}

}  // namespace

double share_within(double radius_m, const Component& component) {
  if (radius_m <= 0.0) return 0.0;
  return share_within(radius_m, principal(component));
}

double radius_holding(double share, std::span<const Component> components) {
  constexpr std::size_t components_max = 4;
  KEDGE_ASSERT(!components.empty() && components.size() <= components_max);
  std::array<Principal, components_max> turned{};
  double high = 0.0;
  for (std::size_t i = 0; i < components.size(); ++i) {
    turned[i] = principal(components[i]);
    high = std::max(high, std::hypot(turned[i].offset_x_m, turned[i].offset_y_m) + 6.0 * turned[i].sigma_x_m);
  }
  const auto total = [&](double radius_m) {
    double sum = 0.0;
    for (std::size_t i = 0; i < components.size(); ++i) sum += turned[i].weight * share_within(radius_m, turned[i]);
    return sum;
  };
  double low = 0.0;
  while (high - low > 1e-3 * high) {
    const double middle = 0.5 * (low + high);
    (total(middle) < share ? low : high) = middle;
  }
  return high;
}

double radius_95(const fusion::Estimate& estimate) {
  if (estimate.phase != fusion::Phase::twofold) {
    const std::array<Component, 1> one = {component_of(estimate.lead, estimate.lead, 1.0)};
    return radius_holding(0.95, one);
  }
  const double sum = estimate.lead.probability + estimate.mirror.probability;
  const std::array<Component, 2> both = {
      component_of(estimate.lead, estimate.lead, estimate.lead.probability / sum),
      component_of(estimate.mirror, estimate.lead, estimate.mirror.probability / sum)};
  return radius_holding(0.95, both);
}

}  // namespace kedge::pipeline
