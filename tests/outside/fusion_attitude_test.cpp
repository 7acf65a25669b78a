#include <Eigen/Eigenvalues>
#include <catch2/catch.hpp>
#include <random>

#include "fusion/attitude_filter.h"

using namespace kedge;
using namespace kedge::fusion;

namespace {

/// The optimal quaternion of Wahba's problem by Davenport's q-method: the eigenvector of the largest eigenvalue
/// of K (Shuster and Oh, Three-axis attitude determination from vector observations, J. Guidance and Control
/// 4, 1981; Markley, J. Astronautical Sciences 36, 1988). Body to site; equal weights.
Quaternion optimal_attitude(const std::array<Vector3, 2>& body, const std::array<Vector3, 2>& site) {
  Matrix3 B = Matrix3::Zero();
  Vector3 z = Vector3::Zero();
  for (std::size_t i = 0; i < 2; ++i) {
    B += site[i].normalized() * body[i].normalized().transpose();
    z += body[i].normalized().cross(site[i].normalized());
  }
  Eigen::Matrix4d K;
  K.topLeftCorner<3, 3>() = B + B.transpose() - B.trace() * Matrix3::Identity();
  K.topRightCorner<3, 1>() = z;
  K.bottomLeftCorner<1, 3>() = z.transpose();
  K(3, 3) = B.trace();
  const Eigen::SelfAdjointEigenSolver<Eigen::Matrix4d> solver(K);
  const Eigen::Vector4d q = solver.eigenvectors().col(3);
  return Quaternion(q[3], q[0], q[1], q[2]).normalized();
}

double angle_between(const Quaternion& a, const Quaternion& b) {
  return rotation_log((a.conjugate() * b).normalized()).norm();
}

}  // namespace

TEST_CASE(
    "two vectors without noise recover the attitude exactly and agree with the optimal quaternion; with noise not") {
  std::mt19937 random(51);
  std::normal_distribution<double> normal;
  const Vector3 up(0, 0, 9.80665);
  const double north = radians(87);
  const Vector3 field = level_attitude(north) * Vector3(20.5, 0.0, -44.0);
  int apart = 0;
  for (int i = 0; i < 200; ++i) {
    const Quaternion truth = rotation_exp(2.0 * Vector3(normal(random), normal(random), normal(random)));
    const Vector3 force_in_body = truth.conjugate() * up;
    const Vector3 field_in_body = truth.conjugate() * field;
    const auto exact = attitude_from_vectors(force_in_body, field_in_body, north);
    REQUIRE(exact);
    CHECK(angle_between(*exact, truth) < 1e-7);
    CHECK(angle_between(*exact, optimal_attitude({force_in_body, field_in_body}, {up, field})) < 1e-7);

    const Vector3 noisy_force = force_in_body + 0.3 * Vector3(normal(random), normal(random), normal(random));
    const Vector3 noisy_field = field_in_body + 1.5 * Vector3(normal(random), normal(random), normal(random));
    const auto noisy = attitude_from_vectors(noisy_force, noisy_field, north);
    REQUIRE(noisy);
    // Gravity is trusted wholly: the up of the answer is the measured one.
    CHECK((*noisy * noisy_force.normalized() - Vector3::UnitZ()).norm() < 1e-9);
    if (angle_between(*noisy, optimal_attitude({noisy_force, noisy_field}, {up, field})) > 1e-4) ++apart;
  }
  CHECK(apart > 190);
}
