#include "fusion/attitude_filter.h"

#include <algorithm>
#include <cmath>

namespace kedge::fusion {

namespace {

// Long, since a gyroscope drifts little once its bias is known.
constexpr double north_time_s = 8.0;
// The bias walks by about this density, rad/s/sqrt(s).
constexpr double bias_walk_radps_rts = 3e-5;
constexpr double bias_known_sigma_radps = radians(0.05);
constexpr double smoothing_time_s = 5.0;

/// Valenti et al. 2015, eq. 60: full gain below `low`, none above `high`.
double adaptive_gain(double error, double low, double high) {
  return std::clamp((high - error) / (high - low), 0.0, 1.0);
}

double smoothing(double dt_s, double time_s) { return 1.0 - std::exp(-dt_s / time_s); }

/// Gain of a mean over the time so far, settling at 1 / time_s (eq. 4).
double settling_rate(double age_s, double dt_s, double time_s) {
  return 1.0 / std::clamp(0.5 * age_s, std::max(dt_s, 1e-3), time_s);
}

}  // namespace

std::optional<Quaternion> attitude_from_vectors(const Vector3& specific_force_mps2, const Vector3& magnetic_field_ut,
                                                double magnetic_north_heading_rad) {
  const double force = specific_force_mps2.norm();
  const double field = magnetic_field_ut.norm();
  if (!(force > 0.0) || !(field > 0.0)) return std::nullopt;
  const Vector3 up = specific_force_mps2 / force;
  const Vector3 level = magnetic_field_ut / field - up * up.dot(magnetic_field_ut / field);
  if (level.norm() < 1e-6) return std::nullopt;
  const Vector3 north = level.normalized();
  Matrix3 R_site_to_body;  // columns: site axes if x pointed to magnetic north
  R_site_to_body << north, up.cross(north), up;
  return (level_attitude(magnetic_north_heading_rad) * Quaternion(Matrix3(R_site_to_body.transpose()))).normalized();
}

void AttitudeFilter::reset(const AttitudeModel& model) {
  *this = AttitudeFilter{};
  gyro_bias_variance = model.gyro_bias_sigma_radps * model.gyro_bias_sigma_radps;
}

void AttitudeFilter::restart() {
  level_age_s = 0.0;
  north_age_s = 0.0;
}

void AttitudeFilter::set_heading(double heading) {
  q_body_to_site = (level_attitude(heading - heading_rad()) * q_body_to_site).normalized();
  aligned = true;
}

void AttitudeFilter::step(const AttitudeModel& model, const AttitudeInput& input) {
  if (!begun) {
    const double force = input.specific_force_mps2.norm();
    if (!(force > 0.0)) return;
    const double heading = heading_rad();
    q_body_to_site = Quaternion::FromTwoVectors(input.specific_force_mps2 / force, Vector3::UnitZ());
    q_body_to_site = (level_attitude(heading - heading_rad()) * q_body_to_site).normalized();
    if (input.magnetic_field_ut) {
      q_body_to_site =
          attitude_from_vectors(input.specific_force_mps2, *input.magnetic_field_ut, model.magnetic_north_heading_rad)
              .value_or(q_body_to_site);
    }
    begun = true;
  }
  if (input.at_rest) learn_bias_at_rest(model, input);
  gyro_bias_variance += bias_walk_radps_rts * bias_walk_radps_rts * input.dt_s;

  const Vector3 rate = input.angular_rate_radps - gyro_bias_radps;
  turned_rad += (q_body_to_site * rate).z() * input.dt_s;
  q_body_to_site = (q_body_to_site * rotation_exp(rate * input.dt_s)).normalized();

  correct_tilt(model, input);
  field_innovation_rad.reset();
  field_wait_s = std::min(field_wait_s + input.dt_s, 0.5);
  if (input.magnetic_field_ut) {
    correct_yaw(model, *input.magnetic_field_ut, input.at_rest, field_wait_s);
    field_wait_s = 0.0;
  }
}

void AttitudeFilter::learn_bias_at_rest(const AttitudeModel& model, const AttitudeInput& input) {
  if (!(input.dt_s > 0.0)) return;
  const double sample_variance = model.gyro_noise_radps_rthz * model.gyro_noise_radps_rthz / input.dt_s + 1e-6;
  const double gain = gyro_bias_variance / (gyro_bias_variance + sample_variance);
  gyro_bias_radps += gain * (input.angular_rate_radps - gyro_bias_radps);
  gyro_bias_variance *= 1.0 - gain;
}

void AttitudeFilter::correct_tilt(const AttitudeModel& model, const AttitudeInput& input) {
  const Vector3 gravity_reaction = input.specific_force_mps2 - input.motion_mps2;
  const double magnitude = gravity_reaction.norm();
  if (!(magnitude > 0.0)) return;
  const double error_share = std::abs(magnitude - model.gravity_mps2) / model.gravity_mps2;
  double gain = adaptive_gain(error_share, 0.1, 0.2);

  const Vector3 up_in_site = q_body_to_site * (gravity_reaction / magnitude);
  const Vector3 tilt = up_in_site.cross(Vector3::UnitZ());  // sine of the angle, about a level axis
  const double angle_rad = std::atan2(tilt.norm(), up_in_site.z());
  tilt_innovation_rad += smoothing(input.dt_s, 0.5) * (std::min(angle_rad, 1.0) - tilt_innovation_rad);
  // A level that was good does not go bad by itself: what lasts is acceleration (eq. 6).
  if (level_age_s > 5.0) gain /= 1.0 + std::pow(tilt_innovation_rad / 0.06, 2);
  if (gain <= 0.0 || tilt.norm() < 1e-12) {
    level_age_s += input.dt_s;
    return;
  }
  const double rate = settling_rate(level_age_s, input.dt_s, input.level_time_s);
  const double share = gain * (1.0 - std::exp(-rate * input.dt_s));
  const Vector3 correction = share * angle_rad * tilt.normalized();
  q_body_to_site = (rotation_exp(correction) * q_body_to_site).normalized();
  if (level_age_s > 1.0 && !input.at_rest) {
    const double unknown = gyro_bias_variance / (gyro_bias_variance + bias_known_sigma_radps * bias_known_sigma_radps);
    gyro_bias_radps -= 0.25 * rate * unknown * (q_body_to_site.conjugate() * correction);
  }
  level_age_s += input.dt_s;
}

void AttitudeFilter::correct_yaw(const AttitudeModel& model, const Vector3& field, bool at_rest, double dt_s) {
  const double strength = field.norm();
  if (!(strength > 1.0)) return;
  if (field_mean_ut <= 0.0) field_mean_ut = strength;
  field_mean_ut += smoothing(dt_s, 60.0) * (strength - field_mean_ut);
  const double expected = model.field_ut.value_or(field_mean_ut);
  const Vector3 field_in_site = q_body_to_site * field;
  const double level_strength = field_in_site.head<2>().norm();
  double error_share = std::abs(strength - expected) / expected;
  if (model.dip_rad) {
    const double dip = std::atan2(-field_in_site.z(), level_strength);
    error_share = std::max(error_share, std::abs(2.0 * std::sin(0.5 * (dip - *model.dip_rad))));
  }
  field_error_share += smoothing(dt_s, smoothing_time_s) * (std::min(error_share, 1.0) - field_error_share);
  if (level_strength < 0.05 * strength || !levelled()) return;

  const double field_heading = std::atan2(field_in_site.y(), field_in_site.x());
  const double innovation = wrap_angle(model.magnetic_north_heading_rad - field_heading);
  if (!aligned) {
    set_heading(heading_rad() + innovation);
    field_innovation_rad = 0.0;
    return;
  }
  heading_innovation_rad += smoothing(dt_s, smoothing_time_s) * (innovation - heading_innovation_rad);
  const double gain = adaptive_gain(error_share, 0.15, 0.35);
  if (gain <= 0.0) return;
  // Standing, the heading stays: a wandering field would only turn it (eq. 10).
  if (at_rest && north_age_s > 5.0) return;
  const double rate = settling_rate(north_age_s, dt_s, north_time_s);
  const double turn = gain * (1.0 - std::exp(-rate * dt_s)) * innovation;
  q_body_to_site = (level_attitude(turn) * q_body_to_site).normalized();
  steered_rad += turn;
  field_innovation_rad = innovation - turn;
  if (north_age_s > 3.0 && !at_rest) {
    const double unknown = gyro_bias_variance / (gyro_bias_variance + bias_known_sigma_radps * bias_known_sigma_radps);
    gyro_bias_radps -= 0.25 * rate * unknown * turn * (q_body_to_site.conjugate() * Vector3::UnitZ());
  }
  north_age_s += dt_s;
}

}  // namespace kedge::fusion
