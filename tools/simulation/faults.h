// Everything that is wrong with real sensors, radios and links, as figures that can be set apart.
//
// The defaults are those of a low-cost inertial unit on a rough vehicle and of an ultra-wideband radio
// with a partly obstructed view; `none()` is the ideal world.
#pragma once

#include <optional>

#include "core/rotation.h"

namespace kedge::simulation {

struct Faults {
  // Inertial unit. The discrete sigma of a sample is density times the square root of the sample rate.
  double gyro_noise_radps_rthz = radians(0.007);
  double gyro_bias_sigma_radps = radians(0.5);  ///< turn-on, each axis
  double gyro_walk_radps_rts = 1e-5;
  double accel_noise_mps2_rthz = 200e-6 * 9.80665;
  double accel_bias_sigma_mps2 = 0.05;  ///< turn-on, each axis
  double accel_walk_mps2_rts = 1e-4;
  double vibration_mps2 = 0.3;  ///< each sample and axis, while moving

  // Magnetic heading: the field turns about the vertical.
  double heading_white_rad = radians(1.5);
  double heading_slow_rad = radians(2.5);  ///< first-order Gauss-Markov
  double heading_slow_s = 30.0;            ///< its correlation time
  double field_noise_ut = 0.2;             ///< each axis

  // Ground and wheels, slow in the distance travelled.
  double terrain_tilt_rad = radians(1.0);
  double slip_rad = radians(0.5);  ///< course minus heading of a wheeled tag

  // Barometer.
  double pressure_noise_pa = 2.0;
  double pressure_slow_pa = 6.0;  ///< weather and draught, first-order Gauss-Markov over 300 s

  // Ranges.
  double range_sigma_m = 0.10;
  double range_loss = 0.10;            ///< share of rangings that fail
  double range_bias_max_m = 0.3;       ///< one constant for each anchor, uniform from 0
  double obstructed_share = 0.05;      ///< of rangings, by a two-state Markov chain
  double obstruction_length = 12.0;    ///< mean length of a burst, rangings
  double obstruction_excess_m = 0.7;   ///< mean of the exponential excess
  double counter_skew_max_ppm = 10.0;  ///< of each radio's crystal, uniform about 0

  // Device clock.
  bool clock_random_origin = true;           ///< otherwise the counter starts at 0
  double clock_skew_max_ppm = 20.0;          ///< uniform about 0
  std::optional<double> restart_after_s;     ///< the device starts anew: counter and sequence from 0
  std::optional<double> clock_wrap_after_s;  ///< the 32-bit counter wraps then

  // Link.
  double delay_min_s = 0.002;
  double delay_jitter_s = 0.004;  ///< mean of the exponential part
  double datagram_loss = 0.01;
  double datagram_duplicate = 0.005;
  double datagram_held = 0.005;    ///< share that is overtaken by later ones
  double datagram_held_s = 0.120;  ///< how long these are held, at most

  [[nodiscard]] static Faults none();
};

}  // namespace kedge::simulation
