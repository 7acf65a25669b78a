// Where the tag is, how it moves and how it lies, in one state: the error-state Kalman filter, one per hypothesis.
//
// Attitude, biases and position are estimated together, so that what the ranges say of a speed corrects the tilt
// that bent it, and nothing is taken as known that is not. The nominal state moves with every inertial sample;
// the covariance follows in steps of some samples, whenever a measurement asks for it.
// Error state order, 20 numbers:
//     position (3, site, of the inertial unit), velocity (3, site), rotation (3, site axes: true = exp(rotation) *
//     nominal), gyroscope bias (3, body), accelerometer bias (3, body), magnetic disturbance, range bias,
//     slip (course minus heading, slow), mounting yaw (the same, constant), pressure drift.
// The errors of position and velocity are what is left once the whole picture is turned by the rotation about a
// pivot, the anchor (Barrau, Bonnabel, The invariant extended Kalman filter as a stable observer, IEEE TAC 62, 2017).
// So the turn about the anchor, which ranges cannot see, is one fixed direction of the error state, and the filter
// never learns it from the wandering of its own linearisation points. MATHEMATICS.md, eq. 47 to 58.
#pragma once

#include <Eigen/Core>

#include "core/rotation.h"
#include "fusion/site.h"

namespace kedge::fusion {

inline constexpr Eigen::Index full_states = 20;
using FullVector = Eigen::Matrix<double, full_states, 1>;
using FullMatrix = Eigen::Matrix<double, full_states, full_states>;

/// Where each part of the error state begins.
namespace in {
inline constexpr Eigen::Index position = 0;
inline constexpr Eigen::Index velocity = 3;
inline constexpr Eigen::Index rotation = 6;
inline constexpr Eigen::Index heading = 8;
inline constexpr Eigen::Index gyro = 9;
inline constexpr Eigen::Index accel = 12;
inline constexpr Eigen::Index field = 15;
inline constexpr Eigen::Index range_bias = 16;
inline constexpr Eigen::Index slip = 17;
inline constexpr Eigen::Index mounting = 18;
inline constexpr Eigen::Index pressure = 19;
}  // namespace in

/// Sizes of what is not known; standard deviations, SI.
struct FullModel {
  double gravity_mps2 = gravity_mps2_default;
  double accel_density_mps2_rthz = 2e-3;
  double vibration_mps2 = 0.3;  ///< per sample, while moving
  double accel_bias_mps2 = 0.05;
  double gyro_density_radps_rthz = 1e-4;
  double gyro_bias_radps = 1e-2;
  double field_sigma_rad = 0.05;  ///< slow disturbance of the magnetic heading
  double range_bias_m = 0.2;
  double slip_rad = 0.01;
  double mounting_rad = 0.01;
  double pressure_drift_m = 0.5;
};

/// A scalar measurement, linearised: innovation and its row.
struct FullLinearised {
  double innovation = 0.0;
  FullVector row = FullVector::Zero();
  double variance = 0.0;  ///< of the measurement, second-order terms included
};

/// The variance of one state becomes sigma^2, its correlations go.
void forget(FullMatrix& covariance, Eigen::Index state, double sigma);

class FullFilter {
 public:
  Vector3 position_m = Vector3::Zero();
  Vector3 velocity_mps = Vector3::Zero();
  Quaternion q_body_to_site = Quaternion::Identity();
  /// The nominal values of the error state from gyroscope bias on, in its order.
  Eigen::Matrix<double, full_states - in::gyro, 1> biases = Eigen::Matrix<double, full_states - in::gyro, 1>::Zero();
  Vector3 pivot_m = Vector3::Zero();  ///< site
  FullMatrix P = FullMatrix::Zero();

  /// Everything unknown but what the model bounds; position, velocity and rotation are the caller's to set.
  void reset(const FullModel& model, const Vector3& pivot_m);

  /// The covariance with the errors of position and velocity taken as plain differences, and back (eq. 48).
  [[nodiscard]] FullMatrix plain_covariance() const;
  void set_plain_covariance(const FullMatrix& plain);
  /// The same knowledge about another pivot.
  void set_pivot(const Vector3& pivot);

  /// One inertial sample, body axes, over dt_s: the nominal state alone.
  void move(const FullModel& model, const Vector3& specific_force_mps2, const Vector3& angular_rate_radps, double dt_s);
  /// The same without inertial data: speed and attitude go on as they are.
  void coast(double dt_s);
  /// Brings the covariance up to the nominal state; vibrating: the accelerometer is shaken; at_rest: what
  /// wanders with the distance travelled stays.
  void catch_up(const FullModel& model, bool vibrating, bool at_rest);

  /// Slant range from anchor_m to the antenna (eq. 52).
  [[nodiscard]] FullLinearised range(const Vector3& anchor_m, const Vector3& lever_m, double range_m,
                                     double sigma_m) const;
  /// Speed of the antenna along an axis of the body turned by slip and mounting yaw about z: 0 forward, 1 left, 2 up.
  /// rate_radps: angular rate, bias removed (eq. 53).
  [[nodiscard]] FullLinearised speed(int axis, const Vector3& lever_m, const Vector3& rate_radps, double speed_mps,
                                     double sigma_mps) const;
  /// Heading by the magnetic field, which may be tilted with the attitude (eq. 54). field_ut: body axes.
  [[nodiscard]] FullLinearised field(const Vector3& field_ut, double north_heading_rad, double sigma_rad) const;
  /// Height of the antenna; by pressure, the drift included (eq. 55).
  [[nodiscard]] FullLinearised height(const Vector3& lever_m, double up_m, double sigma_m, bool by_pressure) const;
  /// Turns a row for plain errors of position and velocity into one for the errors used here (eq. 49).
  void invariant(FullLinearised& measurement) const;
  /// One axis of the velocity, site axes.
  [[nodiscard]] FullLinearised velocity(Eigen::Index axis, double speed_mps, double sigma_mps) const;
  /// One error state from rotation on measured directly: innovation is measured minus nominal.
  [[nodiscard]] static FullLinearised direct(Eigen::Index state, double innovation, double sigma);

  [[nodiscard]] double innovation_variance(const FullLinearised& measurement) const {
    return measurement.row.dot(P * measurement.row) + measurement.variance;
  }
  /// Takes the measurement with the probability that it is one of this model (1: Kalman; less: eq. 31).
  void update(const FullLinearised& measurement, double probability = 1.0);
  /// Moves the nominal state by an error state.
  void correct(const FullVector& error);
  /// The error state that leads from this nominal state to another's.
  [[nodiscard]] FullVector difference_to(const FullFilter& other) const;

  /// Level position and velocity as plain errors: 4 by 4.
  [[nodiscard]] Eigen::Matrix4d level_covariance() const;

  [[nodiscard]] Vector3 gyro_bias_radps() const { return biases.segment<3>(0); }
  [[nodiscard]] Vector3 accel_bias_mps2() const { return biases.segment<3>(in::accel - in::gyro); }
  [[nodiscard]] double bias(Eigen::Index state) const { return biases[state - in::gyro]; }
  [[nodiscard]] double& bias(Eigen::Index state) { return biases[state - in::gyro]; }
  [[nodiscard]] double heading_rad() const { return heading_of(q_body_to_site); }
  [[nodiscard]] Vector3 antenna_m(const Vector3& lever_m) const { return position_m + q_body_to_site * lever_m; }
  [[nodiscard]] double waiting_s() const { return step_.time_s; }
  [[nodiscard]] bool healthy() const;

  template <class Archive>
  void fields(Archive& archive) {
    archive(position_m, velocity_mps, q_body_to_site, biases, pivot_m, P, step_.time_s, step_.sample_s2, step_.blind_s);
  }

 private:
  /// What the covariance has not seen yet.
  struct Step {
    double time_s = 0.0;
    double sample_s2 = 0.0;  ///< sum of the samples' squared lengths
    double blind_s = 0.0;    ///< of it, without inertial data
  };
  void carry(const FullModel& model, double turn_noise);
  void decay(Eigen::Index state, double time_s, double sigma);
  void limit();

  Step step_;
};

}  // namespace kedge::fusion
