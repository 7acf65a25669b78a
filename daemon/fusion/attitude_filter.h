// Which way is up, and where the tag points: the quaternion complementary filter.
//
// After Valenti, Dryanovski, Xiao, Keeping a good attitude, Sensors 15, 2015: the gyroscope carries the
// attitude, gravity corrects tilt, the magnetic field corrects yaw alone. Added to it: gains that start
// high and settle, a feedback of the corrections to the gyroscope bias, the bias read off at rest, and the known
// part of the acceleration (turning at speed) taken out before levelling (MATHEMATICS.md, eq. 1 to 13).
#pragma once

#include <optional>

#include "core/rotation.h"
#include "fusion/site.h"

namespace kedge::fusion {

/// Attitude, body to site, from a specific force at rest and a magnetic field, both in body axes: tilt
/// from the first alone, heading from what is level of the second. Exact for noise-free vectors.
/// None where either is zero or the two are parallel. Shuster and Oh, J. Guidance and Control 1981.
[[nodiscard]] std::optional<Quaternion> attitude_from_vectors(const Vector3& specific_force_mps2,
                                                              const Vector3& magnetic_field_ut,
                                                              double magnetic_north_heading_rad);

/// What the filter is told of site and tag.
struct AttitudeModel {
  double gravity_mps2 = gravity_mps2_default;
  double magnetic_north_heading_rad = 0.0;
  std::optional<double> field_ut;
  std::optional<double> dip_rad;
  double gyro_noise_radps_rthz = 0.0;
  double gyro_bias_sigma_radps = 0.0;
};

/// One step's input, body axes.
struct AttitudeInput {
  Vector3 specific_force_mps2 = Vector3::Zero();
  Vector3 angular_rate_radps = Vector3::Zero();
  std::optional<Vector3> magnetic_field_ut;
  Vector3 motion_mps2 = Vector3::Zero();  ///< known acceleration of the motion itself, body axes
  double level_time_s = 8.0;              ///< over which gravity is averaged: short where the accelerometer is calm
  bool at_rest = false;
  double dt_s = 0.0;
};

struct AttitudeFilter {
  Quaternion q_body_to_site = Quaternion::Identity();
  Vector3 gyro_bias_radps = Vector3::Zero();
  double gyro_bias_variance = 0.0;  ///< of one axis, rad2/s2
  double level_age_s = 0.0;         ///< how long gravity has been averaged; sets its gain
  double north_age_s = 0.0;         ///< the same of the magnetic field
  bool begun = false;
  bool aligned = false;                 ///< the heading means something
  double turned_rad = 0.0;              ///< heading change from the gyroscope alone, unwrapped
  double tilt_innovation_rad = 0.0;     ///< smoothed
  double field_mean_ut = 0.0;           ///< learnt strength
  double field_error_share = 0.0;       ///< smoothed, 0 to 1
  double heading_innovation_rad = 0.0;  ///< smoothed magnetic minus predicted heading
  double steered_rad = 0.0;  ///< yaw the field has added in all; whoever keeps this heading's error counts it
  std::optional<double>
      field_innovation_rad;   ///< of the last step, what its correction left; none without a good field
  double field_wait_s = 0.0;  ///< since the last field sample: they are rarer than the others

  /// As new, bias unknown.
  void reset(const AttitudeModel& model);

  /// dt_s in 0 to 0.5; longer gaps call restart() first.
  void step(const AttitudeModel& model, const AttitudeInput& input);

  /// After a gap in the data: keep the attitude as a guess, average afresh.
  void restart();

  /// Turns the attitude about the vertical so that it has this heading.
  void set_heading(double heading_rad);

  [[nodiscard]] bool levelled() const { return begun && level_age_s >= 1.0; }
  [[nodiscard]] double heading_rad() const { return heading_of(q_body_to_site); }

  template <class Archive>
  void fields(Archive& archive) {
    archive(q_body_to_site, gyro_bias_radps, gyro_bias_variance, level_age_s, north_age_s, begun, aligned, turned_rad,
            tilt_innovation_rad, field_mean_ut, field_error_share, heading_innovation_rad, steered_rad,
            field_innovation_rad, field_wait_s);
  }

 private:
  void correct_tilt(const AttitudeModel& model, const AttitudeInput& input);
  void correct_yaw(const AttitudeModel& model, const Vector3& field_ut, bool at_rest, double dt_s);
  void learn_bias_at_rest(const AttitudeModel& model, const AttitudeInput& input);
};

}  // namespace kedge::fusion
