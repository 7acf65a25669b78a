#include "core/rotation.h"

#include <catch2/catch.hpp>
#include <random>

using namespace kedge;

TEST_CASE("exp and log are inverse on both sides of the series switch and near pi") {
  for (const double angle : {0.0, 1e-12, 9.9e-5, 1.01e-4, 0.3, 3.1415}) {
    const Vector3 v = angle * Vector3(0.36, -0.48, 0.8);
    CHECK((rotation_log(rotation_exp(v)) - v).norm() < 1e-11);
  }
}

TEST_CASE("q and -q have one logarithm") {
  const Quaternion q = rotation_exp(Vector3(0.2, 0.1, -0.4));
  const Quaternion minus(-q.w(), -q.x(), -q.y(), -q.z());
  CHECK((rotation_log(q) - rotation_log(minus)).norm() < 1e-15);
}

TEST_CASE("exp agrees with the rotation about an axis") {
  std::mt19937 random(7);
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  for (int i = 0; i < 100; ++i) {
    const Vector3 axis = Vector3(uniform(random), uniform(random), uniform(random)).normalized();
    const double angle = 3.0 * uniform(random);
    const Matrix3 expected = Eigen::AngleAxisd(angle, axis).toRotationMatrix();
    CHECK((rotation_exp(angle * axis).toRotationMatrix() - expected).norm() < 1e-13);
  }
}

TEST_CASE("skew is the cross product") {
  const Vector3 a(1, -2, 3);
  const Vector3 b(0.5, 4, -1);
  CHECK((skew(a) * b - a.cross(b)).norm() == 0.0);
}

TEST_CASE("heading is counter-clockwise from site east") {
  CHECK(heading_of(level_attitude(radians(90))) == Approx(radians(90)));
  CHECK((level_attitude(radians(90)) * Vector3::UnitX() - Vector3::UnitY()).norm() < 1e-15);
}

TEST_CASE("wrapped angles lie in (-pi, pi]") {
  CHECK(wrap_angle(radians(370)) == Approx(radians(10)));
  CHECK(wrap_angle(radians(-180)) == Approx(radians(180)));
  CHECK(wrap_angle(radians(540)) == Approx(radians(180)));
}
