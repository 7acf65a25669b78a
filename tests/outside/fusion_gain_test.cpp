#include <catch2/catch.hpp>

#include "fusion/position_filter.h"

using namespace kedge;
using namespace kedge::fusion;

TEST_CASE("steady gains are the closed form in the tracking index") {
  // P. R. Kalata, The tracking index: a generalized parameter for alpha-beta and alpha-beta-gamma target
  // trackers, IEEE Trans. AES 20, 1984: acceleration constant over each step, index L = sigma_w T^2 / sigma_v,
  // r = (4 + L - sqrt(8 L + L^2)) / 4, alpha = 1 - r^2, beta = 2 (2 - alpha) - 4 sqrt(1 - alpha).
  for (const double step_s : {0.1, 0.5, 1.0}) {
    for (const double accel_sigma : {0.05, 0.5, 4.0}) {
      FilterModel model;
      model.vibration_mps2 = accel_sigma;
      model.accel_density_mps2_rthz = 0.0;
      model.accel_error_mps2 = 0.0;
      model.range_bias_m = 0.0;
      model.field_sigma_rad = 0.0;
      model.slip_rad = 0.0;
      model.gyro_noise_radps_rthz = 0.0;
      model.height_sigma_m = 0.0;
      PositionFilter filter;
      filter.reset(model);
      for (Eigen::Index i = 0; i < filter_states; ++i)
        filter.set(i, 0.0, i == at::position || i == at::velocity ? 1.0 : 0.0);
      // An anchor so far down the x axis that the range is a coordinate, however far y has strayed.
      const Vector3 anchor(-1e9, 0.0, 0.0);
      const double range_sigma = 0.1;
      FilterInput input;
      input.q_body_to_site = Quaternion::Identity();
      input.specific_force_mps2 = Vector3(0.0, 0.0, model.gravity_mps2);
      input.dt_s = step_s;
      double alpha = 0.0;
      double beta = 0.0;
      for (int k = 0; k < 3000; ++k) {
        filter.predict(model, input);
        const Linearised range = filter.range(anchor, Vector3::Zero(), 1e9, range_sigma);
        const double variance = filter.innovation_variance(range);
        alpha = filter.P(at::position, at::position) / variance;
        beta = filter.P(at::velocity, at::position) / variance * step_s;
        filter.update(range);
      }
      const double index = accel_sigma * step_s * step_s / range_sigma;
      const double r = (4.0 + index - std::sqrt(8.0 * index + index * index)) / 4.0;
      const double alpha_expected = 1.0 - r * r;
      INFO("step " << step_s << " s, acceleration " << accel_sigma << " m/s2");
      CHECK(alpha == Approx(alpha_expected).epsilon(1e-4));
      CHECK(beta == Approx(2.0 * (2.0 - alpha_expected) - 4.0 * std::sqrt(1.0 - alpha_expected)).epsilon(1e-4));
    }
  }
}
