#include "simulation/vehicle.h"

#include <cmath>

#include "simulation/streams.h"

namespace kedge::simulation {

namespace {

// Steps of the central differences: errors of order 1e-6 of the figure, far below any sensor's noise.
constexpr double rate_step_s = 1e-3;
constexpr double lever_step_s = 2e-3;
// Slower than this is standing still: no vibration.
constexpr double moving_speed_mps = 0.05;

}  // namespace

Vehicle::Vehicle(const ScenarioSpec& spec)
    : start_ns_(spec.start_ns),
      flies_(profile_of(spec.scenario) == fusion::Profile::flyer),
      gravity_mps2_(spec.site.gravity_mps2),
      antenna_up_m_(spec.site.ground_up_m + spec.antenna_height_m),
      antenna_in_body_m_(spec.antenna_in_body_m),
      path_(spec.scenario, spec.placement, spec.rest_s, spec.duration_s),
      ground_slope_(Random(spec.seed, streams::ground_slope), flies_ ? 0.0 : std::tan(spec.faults.terrain_tilt_rad),
                    6.0, 30.0),
      roll_rad_(Random(spec.seed, streams::ground_roll), spec.faults.terrain_tilt_rad, 6.0, 30.0),
      slip_rad_(Random(spec.seed, streams::slip), spec.faults.slip_rad, 15.0, 80.0),
      yaw_rad_(Random(spec.seed, streams::yaw), 0.7, 9.0, 30.0) {}

Quaternion Vehicle::wheeled_attitude(const PathPoint& p) const {
  const double heading_rad = p.course_rad - slip_rad_.value(p.travelled_m);
  const double pitch_rad = -std::atan(ground_slope_.value(p.travelled_m));  // about left: nose up is negative
  return from_roll_pitch_yaw(roll_rad_.value(p.travelled_m), pitch_rad, heading_rad);
}

Quaternion Vehicle::flyer_attitude(const PathPoint& p, double t_s) const {
  const Vector3 thrust = p.acceleration_mps2 + gravity_mps2_ * Vector3::UnitZ();
  return Quaternion::FromTwoVectors(Vector3::UnitZ(), thrust) * level_attitude(p.course_rad + yaw_rad_.value(t_s));
}

Vehicle::Pose Vehicle::pose_at(double t_s) const {
  Pose pose{path_.at(t_s), {}};
  PathPoint& p = pose.path;
  p.position_m.z() += antenna_up_m_;
  if (flies_) {
    pose.q_body_to_site = flyer_attitude(p, t_s);
  } else {
    pose.q_body_to_site = wheeled_attitude(p);
    const double slope = ground_slope_.value(p.travelled_m);
    p.position_m.z() += ground_slope_.integral(p.travelled_m);
    p.velocity_mps.z() += slope * p.speed_mps;
    p.acceleration_mps2.z() +=
        ground_slope_.slope(p.travelled_m) * p.speed_mps * p.speed_mps + slope * p.speed_rate_mps2;
  }
  return pose;
}

Truth Vehicle::at(TimeNs time_ns) const {
  const double t_s = seconds(time_ns - start_ns_);
  const Pose pose = pose_at(t_s);
  const Quaternion before = pose_at(t_s - 0.5 * rate_step_s).q_body_to_site;
  const Quaternion after = pose_at(t_s + 0.5 * rate_step_s).q_body_to_site;
  Truth truth;
  truth.time_ns = time_ns;
  truth.position_m = pose.path.position_m;
  truth.velocity_mps = pose.path.velocity_mps;
  truth.acceleration_mps2 = pose.path.acceleration_mps2;
  truth.q_body_to_site = pose.q_body_to_site;
  truth.angular_rate_radps = rotation_log(before.conjugate() * after) / rate_step_s;
  truth.moving = truth.velocity_mps.norm() > moving_speed_mps;
  return truth;
}

Vector3 Vehicle::inertial_unit_acceleration_mps2(TimeNs time_ns) const {
  const double t_s = seconds(time_ns - start_ns_);
  const Pose pose = pose_at(t_s);
  if (antenna_in_body_m_.isZero()) return pose.path.acceleration_mps2;
  const auto lever_m = [&](double at_s) -> Vector3 { return pose_at(at_s).q_body_to_site * antenna_in_body_m_; };
  const Vector3 lever_acceleration_mps2 =
      (lever_m(t_s + lever_step_s) - 2.0 * (pose.q_body_to_site * antenna_in_body_m_) + lever_m(t_s - lever_step_s)) /
      (lever_step_s * lever_step_s);
  return pose.path.acceleration_mps2 - lever_acceleration_mps2;
}

}  // namespace kedge::simulation
