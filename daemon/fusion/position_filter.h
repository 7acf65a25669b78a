// Where the tag is: the extended Kalman filter on position and velocity, one per hypothesis.
//
// The heading of the attitude filter is common to everything the ranges say, so its error is a state here
// and not noise: taken as known, the filter is sure of places it is not at. State order, 14 numbers:
//     position (3, site, of the inertial unit), velocity (3, site), heading error (true minus attitude filter),
//     yaw-rate bias left (true minus attitude filter), accelerometer error (3, body), range bias, magnetic
//     disturbance (of the heading the field gives), slip (course minus heading).
// MATHEMATICS.md, eq. 25 to 33.
#pragma once

#include <Eigen/Core>

#include "core/rotation.h"
#include "fusion/estimate.h"
#include "fusion/site.h"

namespace kedge::fusion {

inline constexpr Eigen::Index filter_states = 14;
using FilterVector = Eigen::Matrix<double, filter_states, 1>;
using FilterMatrix = Eigen::Matrix<double, filter_states, filter_states>;

/// Where each part of the state begins.
namespace at {
inline constexpr Eigen::Index position = 0;
inline constexpr Eigen::Index velocity = 3;
inline constexpr Eigen::Index heading = 6;
inline constexpr Eigen::Index yaw_rate = 7;
inline constexpr Eigen::Index accel = 8;
inline constexpr Eigen::Index range_bias = 11;
inline constexpr Eigen::Index field = 12;
inline constexpr Eigen::Index slip = 13;
}  // namespace at

/// What moves the state over one step.
struct FilterInput {
  Quaternion q_body_to_site;                      ///< of the attitude filter
  Vector3 specific_force_mps2 = Vector3::Zero();  ///< body axes
  Vector3 lever_m = Vector3::Zero();              ///< inertial unit to antenna, body axes
  double antenna_up_m = 0.0;                      ///< height the antenna is known to keep, where `grounded`
  double dt_s = 0.0;
  bool grounded = true;  ///< height known: vertical motion is not integrated
  bool at_rest = false;
  bool blind = false;  ///< no inertial data for this step
};

/// Sizes of what is not known; standard deviations, SI.
struct FilterModel {
  double gravity_mps2 = gravity_mps2_default;
  double accel_density_mps2_rthz = 2e-3;
  double vibration_mps2 = 0.3;    ///< per sample
  double accel_error_mps2 = 0.1;  ///< bias and tilt error together
  double gyro_noise_radps_rthz = 1e-4;
  double yaw_rate_bias_radps = 1e-2;
  double field_sigma_rad = 0.05;  ///< slow disturbance of the magnetic heading
  double slip_rad = 0.01;         ///< slow difference of course and heading
  double height_sigma_m = 0.1;
  double range_bias_m = 0.22;
};

/// A scalar measurement, linearised: innovation and its row.
struct Linearised {
  double innovation = 0.0;
  FilterVector row = FilterVector::Zero();
  double variance = 0.0;  ///< of the measurement, second-order terms included
};

class PositionFilter {
 public:
  FilterVector x = FilterVector::Zero();
  FilterMatrix P = FilterMatrix::Identity();

  /// Everything unknown but what the model bounds; position and velocity are the caller's to set.
  void reset(const FilterModel& model);

  void predict(const FilterModel& model, const FilterInput& input);

  /// Slant range from anchor_m to the antenna (eq. 29). The lever arm is turned by the attitude.
  [[nodiscard]] Linearised range(const Vector3& anchor_m, const Vector3& lever_in_site_m, double range_m,
                                 double sigma_m) const;
  /// Level speed along the course that the heading gives, or across it, to its left (eq. 30).
  [[nodiscard]] Linearised speed(double heading_rad, bool across, double speed_mps, double sigma_mps) const;
  /// Magnetic minus filtered heading (eq. 32).
  [[nodiscard]] Linearised field(double innovation_rad, double sigma_rad) const;
  /// One state measured directly.
  [[nodiscard]] Linearised direct(Eigen::Index state, double value, double sigma) const;

  [[nodiscard]] double innovation_variance(const Linearised& measurement) const {
    return measurement.row.dot(P * measurement.row) + measurement.variance;
  }
  /// Takes the measurement with the probability that it is one of this model (1: Kalman; less: eq. 31).
  void update(const Linearised& measurement, double probability = 1.0);

  /// Sets states to given values: correlations go, the variance becomes sigma^2.
  void set(Eigen::Index state, double value, double sigma);

  [[nodiscard]] Vector3 position_m() const { return x.segment<3>(at::position); }
  [[nodiscard]] Vector3 velocity_mps() const { return x.segment<3>(at::velocity); }
  [[nodiscard]] double heading_error_rad() const { return x[at::heading]; }
  [[nodiscard]] bool healthy() const;

  template <class Archive>
  void fields(Archive& archive) {
    archive(x, P);
  }

 private:
  struct Step;  ///< one prediction: transition, noise
  void wander(const FilterModel& model, const FilterInput& input, Step& step);
  void move(const FilterModel& model, const FilterInput& input, Step& step);
  void stand(Step& step);
  void keep_height(const FilterModel& model, const FilterInput& input, double up_before_m, Step& step);
  void decay_state(const Step& step);
  void limit();
};

}  // namespace kedge::fusion
