#include "fusion/mixture.h"

#include <Eigen/Cholesky>
#include <Eigen/LU>
#include <algorithm>
#include <cmath>

#include "core/assert.h"

namespace kedge::fusion {

namespace {

/// Squared distance, over the sum of the covariances, below which two are one.
constexpr double alike_square = 0.5;
/// The same for a component and the cluster it joins.
constexpr double together_square = 9.0;

/// Evidence counts for so much: neighbouring measurements err alike, and the models of motion are not exact.
constexpr double evidence = 0.5;

/// What tells hypotheses apart: level position and velocity.
double distance_square(const Component& a, const Component& b) {
  Eigen::Vector4d apart;
  apart << a.filter.position_m.head<2>() - b.filter.position_m.head<2>(),
      a.filter.velocity_mps.head<2>() - b.filter.velocity_mps.head<2>();
  const Eigen::Matrix4d both =
      a.filter.level_covariance() + b.filter.level_covariance() + 1e-6 * Eigen::Matrix4d::Identity();
  return apart.dot(both.ldlt().solve(apart));
}

/// Position and velocity of one component's antenna, as a cluster of its own.
Cluster alone(const Component& component, const Vector3& lever_m, const Vector3& rate_radps) {
  const FullFilter& filter = component.filter;
  const Vector3 lever = filter.q_body_to_site * lever_m;
  Eigen::Matrix<double, 3, full_states> row = Eigen::Matrix<double, 3, full_states>::Zero();
  row.block<3, 3>(0, in::position).setIdentity();
  row.block<3, 3>(0, in::rotation) = -skew(filter.position_m + lever - filter.pivot_m);
  Eigen::Matrix<double, 3, full_states> row_speed = Eigen::Matrix<double, 3, full_states>::Zero();
  row_speed.block<3, 3>(0, in::velocity).setIdentity();
  row_speed.block<3, 3>(0, in::rotation) = -skew(filter.velocity_mps);
  Cluster cluster;
  cluster.weight = component.weight;
  cluster.position_m = filter.position_m + lever;
  cluster.position_covariance_m2 = row * filter.P * row.transpose();
  cluster.velocity_mps =
      filter.velocity_mps + filter.q_body_to_site * (rate_radps - filter.gyro_bias_radps()).cross(lever_m);
  cluster.velocity_covariance_m2ps2 = row_speed * filter.P * row_speed.transpose();
  return cluster;
}

void join(Cluster& cluster, const Cluster& other) {
  const double total = cluster.weight + other.weight;
  if (!(total > 0.0)) return;
  const double share = other.weight / total;
  const Vector3 apart = other.position_m - cluster.position_m;
  const Vector3 faster = other.velocity_mps - cluster.velocity_mps;
  cluster.position_covariance_m2 = (1.0 - share) * cluster.position_covariance_m2 +
                                   share * other.position_covariance_m2 +
                                   share * (1.0 - share) * apart * apart.transpose();
  cluster.velocity_covariance_m2ps2 = (1.0 - share) * cluster.velocity_covariance_m2ps2 +
                                      share * other.velocity_covariance_m2ps2 +
                                      share * (1.0 - share) * faster * faster.transpose();
  cluster.position_m += share * apart;
  cluster.velocity_mps += share * faster;
  cluster.weight = total;
}

bool together(const Cluster& cluster, const Cluster& other) {
  const Vector2 apart = cluster.position_m.head<2>() - other.position_m.head<2>();
  const Matrix2 both =
      cluster.position_covariance_m2.topLeftCorner<2, 2>() + other.position_covariance_m2.topLeftCorner<2, 2>();
  return apart.dot(both.inverse() * apart) < together_square;
}

}  // namespace

void Mixture::add(const Component& component) {
  KEDGE_ASSERT(!full());
  components_.push_back(component);
}

void Mixture::keep_lead() {
  if (components_.empty()) return;
  components_.resize(1);
  components_.front().weight = 1.0;
}

void Mixture::drop_lightest() {
  const auto lightest = std::min_element(components_.begin(), components_.end(),
                                         [](const Component& a, const Component& b) { return a.weight < b.weight; });
  components_.erase(lightest);
}

void Mixture::reweigh(const LogLikelihoods& log_likelihoods, double share) {
  if (components_.size() < 2) return;
  double best = log_likelihoods[0];
  for (std::size_t i = 1; i < components_.size(); ++i) best = std::max(best, log_likelihoods[i]);
  if (!std::isfinite(best)) return;
  for (std::size_t i = 0; i < components_.size(); ++i)
    components_[i].weight *= std::exp(share * evidence * (log_likelihoods[i] - best));
  normalise();
}

void Mixture::normalise() {
  double total = 0.0;
  for (const Component& component : components_) total += component.weight;
  if (!(total > 0.0)) return;
  for (Component& component : components_) component.weight /= total;
}

void Mixture::order() {
  const auto heaviest = std::max_element(components_.begin(), components_.end(),
                                         [](const Component& a, const Component& b) { return a.weight < b.weight; });
  if (heaviest != components_.begin() && heaviest != components_.end()) std::iter_swap(components_.begin(), heaviest);
}

void Mixture::thin(double share_min) {
  order();
  if (components_.size() < 2) return;
  const double weight_min = share_min * components_.front().weight;
  std::size_t kept = 0;
  for (std::size_t i = 0; i < components_.size(); ++i) {
    if (components_[i].weight < weight_min) continue;
    // The nearest one that stays takes it in, if it is alike.
    bool taken = false;
    for (std::size_t k = 0; k < kept && !taken; ++k) {
      if (distance_square(components_[k], components_[i]) > alike_square) continue;
      components_[k] = merged(components_[k], components_[i]);
      taken = true;
    }
    if (taken) continue;
    if (kept != i) components_[kept] = components_[i];
    ++kept;
  }
  components_.resize(kept);
  normalise();
}

Clusters Mixture::clusters(const Vector3& lever_m, const Vector3& rate_radps) const {
  KEDGE_ASSERT(!components_.empty());
  std::array<bool, capacity> taken{};
  const auto grow = [&](std::size_t first) {
    Cluster cluster = alone(components_[first], lever_m, rate_radps);
    taken[first] = true;
    for (bool grown = true; grown;) {
      grown = false;
      for (std::size_t i = 0; i < components_.size(); ++i) {
        if (taken[i]) continue;
        const Cluster other = alone(components_[i], lever_m, rate_radps);
        if (!together(cluster, other)) continue;
        join(cluster, other);
        taken[i] = grown = true;
      }
    }
    return cluster;
  };
  Clusters result{grow(0), std::nullopt};
  std::optional<std::size_t> next;
  for (std::size_t i = 0; i < components_.size(); ++i) {
    if (!taken[i] && (!next || components_[i].weight > components_[*next].weight)) next = i;
  }
  if (next) result.second = grow(*next);
  if (result.second && result.second->weight > result.lead.weight) std::swap(result.lead, *result.second);
  return result;
}

Component merged(const Component& a, const Component& b) {
  const double total = a.weight + b.weight;
  if (!(total > 0.0)) return a;
  const double share = b.weight / total;
  const FullVector apart = a.filter.difference_to(b.filter);
  Component result = a;
  result.weight = total;
  result.filter.P = (1.0 - share) * a.filter.P + share * b.filter.P + share * (1.0 - share) * apart * apart.transpose();
  result.filter.correct(share * apart);
  return result;
}

std::array<Component, 3> split(const Component& whole, const Vector2& direction) {
  // Of a standard normal: weights, distance and the variance left to each, so that the sum's variance is 1.
  constexpr double outer_weight = 0.2252;
  constexpr double apart = 1.0575;
  constexpr double variance_left = 1.0 - 2.0 * outer_weight * apart * apart;
  const FullVector cross = whole.filter.P.leftCols<2>() * direction;
  const double variance = direction.dot(cross.head<2>());
  std::array<Component, 3> parts{whole, whole, whole};
  if (!(variance > 0.0)) return parts;
  const FullVector axis = cross / std::sqrt(variance);
  for (std::size_t i = 0; i < parts.size(); ++i) {
    const double side = static_cast<double>(i) - 1.0;
    parts[i].weight = whole.weight * (i == 1 ? 1.0 - 2.0 * outer_weight : outer_weight);
    parts[i].filter.P -= (1.0 - variance_left) * axis * axis.transpose();
    parts[i].filter.correct(side * apart * axis);
  }
  return parts;
}

Component reflected(const Component& original, const Vector3& anchor_m, const Vector2& course) {
  const Vector2 along = course.normalized();
  Matrix3 S = Matrix3::Identity();
  S.topLeftCorner<2, 2>() = 2.0 * along * along.transpose() - Matrix2::Identity();
  Component image = original;
  FullFilter& filter = image.filter;
  filter.position_m = anchor_m + S * (filter.position_m - anchor_m);
  filter.velocity_mps = S * filter.velocity_mps;
  // Rotations are axial vectors: a mirror turns their sense. What is right of the vehicle comes to its left.
  FullMatrix T = FullMatrix::Identity();
  T.block<3, 3>(in::position, in::position) = S;
  T.block<3, 3>(in::velocity, in::velocity) = S;
  T.block<3, 3>(in::rotation, in::rotation) = -S;
  T(in::gyro, in::gyro) = T(in::gyro + 2, in::gyro + 2) = -1.0;
  T(in::accel + 1, in::accel + 1) = -1.0;
  T(in::field, in::field) = T(in::slip, in::slip) = T(in::mounting, in::mounting) = -1.0;
  filter.set_plain_covariance(T * original.filter.plain_covariance() * T.transpose());
  return image;
}

}  // namespace kedge::fusion
