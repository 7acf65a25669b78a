// The site and the tag as the models see them: SI units, site axes, radians. config/ makes these
// from the configuration file.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "core/physics.h"
#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

struct Anchor {
  std::string name;
  std::uint32_t anchor_id = 0;
  Vector3 position_m = Vector3::Zero();
  double range_sigma_m = 0.12;
  double range_bias_m = 0.0;
  double range_scale = 0.0;  ///< 0.07: reads 7 % long
};

struct Box {
  Vector2 low_m = Vector2::Zero();
  Vector2 high_m = Vector2::Zero();
};

struct Site {
  std::string name;
  std::vector<Anchor> anchors;
  double gravity_mps2 = gravity_mps2_default;
  double propagation_speed_mps = propagation_speed_mps_default;
  double bearing_rad = 0.0;                 ///< of the y axis from true north, clockwise
  double magnetic_north_heading_rad = 0.0;  ///< heading (site east, counter-clockwise) of magnetic north
  std::optional<double> field_ut;
  std::optional<double> dip_rad;  ///< below the horizon
  double ground_up_m = 0.0;
  std::optional<Box> extent;
};

enum class Profile : std::uint8_t { wheeled, walker, flyer, free };
enum class Method : std::uint8_t { mixture, speed_aided, plain };

struct Start {
  Vector2 position_m = Vector2::Zero();
  double position_sigma_m = 1.0;
  std::optional<double> heading_rad;
  double heading_sigma_rad = 0.0;
};

struct InertialModel {
  double gyro_noise_radps_rthz = radians(0.007);
  double accel_noise_mps2_rthz = 200e-6 * 9.80665;
  double gyro_bias_sigma_radps = radians(0.5);
  double accel_bias_sigma_mps2 = 0.05;
  double vibration_sigma_mps2 = 0.3;
  double gyro_full_scale_radps = radians(2000.0);
  double accel_full_scale_mps2 = 16 * 9.80665;
};

struct Tag {
  std::string name;
  Profile profile = Profile::wheeled;
  Method method = Method::mixture;
  double antenna_height_m = 0.5;  ///< above the ground
  double height_sigma_m = 0.1;
  double speed_max_mps = 3.0;
  std::optional<Start> start;
  Vector3 antenna_in_body_m = Vector3::Zero();  ///< lever arm, inertial unit to range antenna
  InertialModel inertial;
  bool magnetometer = true;
  double magnetic_heading_sigma_rad = radians(2.5);
};

}  // namespace kedge::fusion
