#include "fusion/attitude_filter.h"

#include <catch2/catch.hpp>
#include <random>

using namespace kedge;
using namespace kedge::fusion;

namespace {

constexpr double dt_s = 0.01;
const Vector3 field_in_site(0.0, 20.0, -43.0);  // magnetic north is site north

AttitudeModel model() {
  AttitudeModel result;
  result.magnetic_north_heading_rad = radians(90);
  result.field_ut = field_in_site.norm();
  result.gyro_noise_radps_rthz = radians(0.007);
  result.gyro_bias_sigma_radps = radians(0.5);
  return result;
}

AttitudeInput standing(const Quaternion& q_body_to_site, const Vector3& bias_radps) {
  AttitudeInput input;
  input.specific_force_mps2 = q_body_to_site.conjugate() * Vector3(0, 0, gravity_mps2_default);
  input.angular_rate_radps = bias_radps;
  input.magnetic_field_ut = Vector3(q_body_to_site.conjugate() * field_in_site);
  input.dt_s = dt_s;
  return input;
}

double angle_between(const Quaternion& a, const Quaternion& b) { return rotation_log(a.conjugate() * b).norm(); }

}  // namespace

TEST_CASE("gravity and the field give the whole attitude within seconds, from any start") {
  std::mt19937 random(11);
  std::normal_distribution<double> normal;
  for (int i = 0; i < 20; ++i) {
    const Quaternion truth = rotation_exp(Vector3(0.4 * normal(random), 0.4 * normal(random), 2.0 * normal(random)));
    AttitudeFilter filter;
    filter.reset(model());
    for (int k = 0; k < 300; ++k) filter.step(model(), standing(truth, Vector3::Zero()));
    INFO("draw " << i);
    CHECK(filter.levelled());
    CHECK(filter.aligned);
    CHECK(angle_between(filter.q_body_to_site, truth) < radians(0.05));
  }
}

TEST_CASE("the magnetic correction turns yaw alone") {
  const Quaternion truth = from_roll_pitch_yaw(radians(8), radians(-5), radians(30));
  AttitudeFilter filter;
  filter.reset(model());
  for (int k = 0; k < 300; ++k) filter.step(model(), standing(truth, Vector3::Zero()));
  const Vector3 up_before = filter.q_body_to_site.conjugate() * Vector3::UnitZ();
  AttitudeInput turned = standing(truth, Vector3::Zero());
  turned.magnetic_field_ut = Vector3(truth.conjugate() * (level_attitude(radians(20)) * field_in_site));
  for (int k = 0; k < 500; ++k) filter.step(model(), turned);
  CHECK((filter.q_body_to_site.conjugate() * Vector3::UnitZ() - up_before).norm() < 1e-4);
  CHECK(degrees(wrap_angle(filter.heading_rad() - heading_of(truth))) < -5.0);
}

TEST_CASE("the bias is read off at rest and the heading then holds without a field") {
  const Vector3 bias(radians(0.6), radians(-0.4), radians(0.8));
  AttitudeFilter filter;
  filter.reset(model());
  AttitudeInput input = standing(level_attitude(radians(70)), bias);
  input.at_rest = true;
  for (int k = 0; k < 500; ++k) filter.step(model(), input);
  CHECK((filter.gyro_bias_radps - bias).norm() < radians(0.02));
  CHECK(filter.gyro_bias_variance < std::pow(radians(0.05), 2));
  const double before = filter.heading_rad();
  input.magnetic_field_ut.reset();
  input.at_rest = false;
  for (int k = 0; k < 6000; ++k) filter.step(model(), input);
  CHECK(std::abs(wrap_angle(filter.heading_rad() - before)) < radians(1.2));
}

TEST_CASE("a known acceleration of the motion does not tilt the filter, an unknown one only little") {
  const Quaternion level = level_attitude(0.0);
  const Vector3 acceleration(0.0, 1.5, 0.0);  // 9 degrees of apparent tilt
  const auto tilt_after = [&](bool told) {
    AttitudeFilter filter;
    filter.reset(model());
    for (int k = 0; k < 1000; ++k) filter.step(model(), standing(level, Vector3::Zero()));
    AttitudeInput input = standing(level, Vector3::Zero());
    input.specific_force_mps2 += acceleration;
    if (told) input.motion_mps2 = acceleration;
    for (int k = 0; k < 200; ++k) filter.step(model(), input);
    return std::acos((filter.q_body_to_site * Vector3::UnitZ()).z());
  };
  CHECK(tilt_after(true) < radians(0.01));
  CHECK(tilt_after(false) < radians(1.5));
  CHECK(tilt_after(false) > tilt_after(true));
}

TEST_CASE("a field of the wrong strength is not followed and is reported") {
  const Quaternion truth = level_attitude(radians(10));
  AttitudeFilter filter;
  filter.reset(model());
  for (int k = 0; k < 300; ++k) filter.step(model(), standing(truth, Vector3::Zero()));
  AttitudeInput disturbed = standing(truth, Vector3::Zero());
  disturbed.magnetic_field_ut = Vector3(truth.conjugate() * (level_attitude(radians(90)) * field_in_site) * 2.0);
  for (int k = 0; k < 2000; ++k) filter.step(model(), disturbed);
  CHECK(std::abs(wrap_angle(filter.heading_rad() - radians(10))) < radians(0.1));
  CHECK(filter.field_error_share > 0.8);
  CHECK(degrees(std::abs(filter.heading_innovation_rad)) > 80.0);
}

TEST_CASE("vectors that tell nothing give no attitude") {
  CHECK_FALSE(attitude_from_vectors(Vector3::Zero(), Vector3(1, 0, 0), 0.0));
  CHECK_FALSE(attitude_from_vectors(Vector3(0, 0, 9.8), Vector3::Zero(), 0.0));
  CHECK_FALSE(attitude_from_vectors(Vector3(0, 0, 9.8), Vector3(0, 0, -48.0), 0.0));
}
