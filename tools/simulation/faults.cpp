#include "simulation/faults.h"

namespace kedge::simulation {

Faults Faults::none() {
  Faults f;
  f.gyro_noise_radps_rthz = f.gyro_bias_sigma_radps = f.gyro_walk_radps_rts = 0.0;
  f.accel_noise_mps2_rthz = f.accel_bias_sigma_mps2 = f.accel_walk_mps2_rts = f.vibration_mps2 = 0.0;
  f.heading_white_rad = f.heading_slow_rad = f.field_noise_ut = 0.0;
  f.terrain_tilt_rad = f.slip_rad = 0.0;
  f.pressure_noise_pa = f.pressure_slow_pa = 0.0;
  f.range_sigma_m = f.range_loss = f.range_bias_max_m = f.obstructed_share = f.counter_skew_max_ppm = 0.0;
  f.clock_random_origin = false;
  f.clock_skew_max_ppm = 0.0;
  f.delay_min_s = f.delay_jitter_s = 0.0;
  f.datagram_loss = f.datagram_duplicate = f.datagram_held = 0.0;
  return f;
}

}  // namespace kedge::simulation
