#include "fusion/full_filter.h"

#include <algorithm>
#include <cmath>

namespace kedge::fusion {

namespace {

// First-order Gauss-Markov correlation times.
constexpr double field_time_s = 30.0;
constexpr double slip_time_s = 15.0;
constexpr double range_bias_time_s = 600.0;
constexpr double pressure_time_s = 300.0;
constexpr double gyro_walk_radps_rts = 2e-5;
constexpr double accel_walk_mps2_rts = 3e-4;
// Samples are rare and motion is not constant between them; scale and alignment errors.
constexpr double gyro_floor_radps_rthz = 2e-4;
// Without inertial data: acceleration and turning as white noise of these densities.
constexpr double blind_accel_mps2_rthz = 1.0;
constexpr double blind_turn_radps_rthz = 0.3;
// Nothing on a site is further, faster or more turned than this, so no covariance need be.
constexpr double position_sigma_max_m = 1e3;
constexpr double velocity_sigma_max_mps = 30.0;
constexpr double rotation_sigma_max_rad = 1.8;
constexpr double range_min_m = 0.3;

double square(double value) { return value * value; }

}  // namespace

void FullFilter::reset(const FullModel& model, const Vector3& pivot) {
  *this = FullFilter{};
  pivot_m = pivot;
  P.diagonal().segment<3>(in::position).setConstant(square(position_sigma_max_m));
  P.diagonal().segment<3>(in::velocity).setConstant(1.0);
  P.diagonal().segment<3>(in::rotation).setConstant(1.0);
  P.diagonal().segment<3>(in::gyro).setConstant(square(model.gyro_bias_radps));
  P.diagonal().segment<3>(in::accel).setConstant(square(model.accel_bias_mps2));
  P(in::field, in::field) = square(model.field_sigma_rad);
  P(in::range_bias, in::range_bias) = square(model.range_bias_m);
  P(in::slip, in::slip) = square(model.slip_rad);
  P(in::mounting, in::mounting) = square(model.mounting_rad);
  P(in::pressure, in::pressure) = square(model.pressure_drift_m);
}

void FullFilter::move(const FullModel& model, const Vector3& specific_force, const Vector3& angular_rate, double dt_s) {
  if (!(dt_s > 0.0)) return;
  const Vector3 half_turn = 0.5 * dt_s * (angular_rate - gyro_bias_radps());
  const Quaternion half = rotation_exp(half_turn);
  // The sample holds for the step, so it is turned by the attitude in the middle of it.
  const Quaternion middle = q_body_to_site * half;
  const Vector3 force = middle * (specific_force - accel_bias_mps2());
  const Vector3 acceleration = force - Vector3(0.0, 0.0, model.gravity_mps2);
  position_m += dt_s * velocity_mps + 0.5 * dt_s * dt_s * acceleration;
  velocity_mps += dt_s * acceleration;
  q_body_to_site = (middle * half).normalized();
  step_.time_s += dt_s;
  step_.sample_s2 += dt_s * dt_s;
}

void FullFilter::coast(double dt_s) {
  position_m += dt_s * velocity_mps;
  step_.time_s += dt_s;
  step_.blind_s += dt_s;
}

void FullFilter::decay(Eigen::Index state, double time_s, double sigma) {
  const double keep = std::exp(-step_.time_s / time_s);
  P.row(state) *= keep;
  P.col(state) *= keep;
  P(state, state) += square(sigma) * (1.0 - keep * keep);
  bias(state) *= keep;
}

FullMatrix FullFilter::plain_covariance() const {
  FullMatrix turn = FullMatrix::Identity();
  turn.block<3, 3>(in::position, in::rotation) = -skew(position_m - pivot_m);
  turn.block<3, 3>(in::velocity, in::rotation) = -skew(velocity_mps);
  return turn * P * turn.transpose();
}

void FullFilter::set_plain_covariance(const FullMatrix& plain) {
  FullMatrix turn = FullMatrix::Identity();
  turn.block<3, 3>(in::position, in::rotation) = skew(position_m - pivot_m);
  turn.block<3, 3>(in::velocity, in::rotation) = skew(velocity_mps);
  P = turn * plain * turn.transpose();
}

void FullFilter::set_pivot(const Vector3& pivot) {
  const FullMatrix plain = plain_covariance();
  pivot_m = pivot;
  set_plain_covariance(plain);
}

Eigen::Matrix4d FullFilter::level_covariance() const {
  Eigen::Matrix<double, 4, 9> rows = Eigen::Matrix<double, 4, 9>::Zero();
  rows.block<2, 2>(0, in::position).setIdentity();
  rows.block<2, 2>(2, in::velocity).setIdentity();
  rows.block<2, 3>(0, in::rotation) = -skew(position_m - pivot_m).topRows<2>();
  rows.block<2, 3>(2, in::rotation) = -skew(velocity_mps).topRows<2>();
  return rows * P.topLeftCorner<9, 9>() * rows.transpose();
}

void FullFilter::carry(const FullModel& model, double turn_noise) {
  const double dt = step_.time_s;
  const Matrix3 biased = -dt * q_body_to_site.toRotationMatrix();
  const Matrix3 away = skew(position_m - pivot_m);
  const Matrix3 speed = skew(velocity_mps);
  const Matrix3 fall = -model.gravity_mps2 * dt * skew(Vector3::UnitZ());
  const Matrix3 turned_p = away * biased;
  const Matrix3 turned_v = speed * biased;
  // F P F^T with F sparse (eq. 50): first the columns, then the rows.
  P.middleCols<3>(in::position) +=
      dt * P.middleCols<3>(in::velocity) + P.middleCols<3>(in::rotation) * (0.5 * dt * fall).transpose() +
      P.middleCols<3>(in::gyro) * turned_p.transpose() + P.middleCols<3>(in::accel) * (0.5 * dt * biased).transpose();
  P.middleCols<3>(in::velocity) += P.middleCols<3>(in::rotation) * fall.transpose() +
                                   P.middleCols<3>(in::gyro) * turned_v.transpose() +
                                   P.middleCols<3>(in::accel) * biased.transpose();
  P.middleCols<3>(in::rotation) += P.middleCols<3>(in::gyro) * biased.transpose();
  P.middleRows<3>(in::position) +=
      dt * P.middleRows<3>(in::velocity) + (0.5 * dt * fall) * P.middleRows<3>(in::rotation) +
      turned_p * P.middleRows<3>(in::gyro) + (0.5 * dt * biased) * P.middleRows<3>(in::accel);
  P.middleRows<3>(in::velocity) +=
      fall * P.middleRows<3>(in::rotation) + turned_v * P.middleRows<3>(in::gyro) + biased * P.middleRows<3>(in::accel);
  P.middleRows<3>(in::rotation) += biased * P.middleRows<3>(in::gyro);
  // Turning by noise leaves position and velocity where they are: what is left of them turns the other way.
  Eigen::Matrix<double, 9, 3> noise;
  noise << away, speed, Matrix3::Identity();
  P.topLeftCorner<9, 9>() += turn_noise * noise * noise.transpose();
}

void FullFilter::catch_up(const FullModel& model, bool vibrating, bool at_rest) {
  const double dt = step_.time_s;
  if (!(dt > 0.0)) return;
  carry(model, (square(model.gyro_density_radps_rthz) + square(gyro_floor_radps_rthz)) * dt +
                   square(blind_turn_radps_rthz) * step_.blind_s);
  const double speed_noise = square(model.accel_density_mps2_rthz) * dt +
                             (vibrating ? square(model.vibration_mps2) * step_.sample_s2 : 0.0) +
                             square(blind_accel_mps2_rthz) * step_.blind_s;
  for (Eigen::Index axis = 0; axis < 3; ++axis) {
    const Eigen::Index p = in::position + axis;
    const Eigen::Index v = in::velocity + axis;
    P(v, v) += speed_noise;
    P(p, v) += 0.5 * dt * speed_noise;
    P(v, p) += 0.5 * dt * speed_noise;
    P(p, p) += dt * dt / 3.0 * speed_noise;
    P(in::gyro + axis, in::gyro + axis) += square(gyro_walk_radps_rts) * dt;
    P(in::accel + axis, in::accel + axis) += square(accel_walk_mps2_rts) * dt;
  }
  decay(in::field, field_time_s, model.field_sigma_rad);
  decay(in::pressure, pressure_time_s, model.pressure_drift_m);
  if (!at_rest) {
    decay(in::range_bias, range_bias_time_s, model.range_bias_m);
    decay(in::slip, slip_time_s, model.slip_rad);
  }
  limit();
  step_ = Step{};
}

void FullFilter::limit() {
  const auto cap = [&](Eigen::Index state, double sigma_max) {
    const double sigma = std::sqrt(P(state, state));
    if (!(sigma > sigma_max)) return;
    const double shrink = sigma_max / sigma;  // a congruence: the matrix stays positive
    P.row(state) *= shrink;
    P.col(state) *= shrink;
  };
  for (Eigen::Index i = 0; i < 3; ++i) {
    cap(in::position + i, position_sigma_max_m);
    cap(in::velocity + i, velocity_sigma_max_mps);
    cap(in::rotation + i, rotation_sigma_max_rad);
  }
}

void FullFilter::invariant(FullLinearised& measurement) const {
  const Vector3 to_position = measurement.row.segment<3>(in::position);
  const Vector3 to_velocity = measurement.row.segment<3>(in::velocity);
  measurement.row.segment<3>(in::rotation) +=
      (position_m - pivot_m).cross(to_position) + velocity_mps.cross(to_velocity);
}

FullLinearised FullFilter::range(const Vector3& anchor_m, const Vector3& lever_m, double range_m,
                                 double sigma_m) const {
  const Vector3 lever = q_body_to_site * lever_m;
  const Vector3 line = position_m + lever - anchor_m;
  const double distance = std::max(line.norm(), 1e-3);
  const Vector3 unit = line / distance;
  FullLinearised result;
  result.innovation = range_m - distance - bias(in::range_bias);
  result.row.segment<3>(in::position) = unit;
  result.row.segment<3>(in::rotation) = lever.cross(unit);
  result.row[in::range_bias] = 1.0;
  // What the curvature of the circle hides from the linear model counts as noise (eq. 29).
  const Matrix3 across = Matrix3::Identity() - unit * unit.transpose();
  const Matrix3 spread = across * P.block<3, 3>(in::position, in::position) * across;
  result.variance = square(sigma_m) + 0.5 * spread.squaredNorm() / square(std::max(distance, range_min_m));
  invariant(result);
  return result;
}

FullLinearised FullFilter::speed(int axis, const Vector3& lever_m, const Vector3& rate_radps, double speed_mps,
                                 double sigma_mps) const {
  const double turn = bias(in::slip) + bias(in::mounting);
  const Vector3 forward(std::cos(turn), std::sin(turn), 0.0);
  const Vector3 left(-forward.y(), forward.x(), 0.0);
  const Vector3 direction = axis == 0 ? forward : (axis == 1 ? left : Vector3(Vector3::UnitZ()));
  const Vector3 in_body = q_body_to_site.conjugate() * velocity_mps + rate_radps.cross(lever_m);
  const Vector3 in_site = q_body_to_site * direction;
  FullLinearised result;
  result.innovation = speed_mps - direction.dot(in_body);
  result.row.segment<3>(in::velocity) = in_site;
  result.row.segment<3>(in::rotation) = in_site.cross(velocity_mps);
  result.row.segment<3>(in::gyro) = direction.cross(lever_m);
  result.row[in::slip] = axis == 0 ? left.dot(in_body) : (axis == 1 ? -forward.dot(in_body) : 0.0);
  result.row[in::mounting] = result.row[in::slip];
  result.variance = square(sigma_mps);
  invariant(result);
  return result;
}

FullLinearised FullFilter::field(const Vector3& field_ut, double north_heading_rad, double sigma_rad) const {
  const Vector3 in_site = q_body_to_site * field_ut;
  const double level_square = std::max(in_site.head<2>().squaredNorm(), 1e-6);
  FullLinearised result;
  result.innovation = wrap_angle(std::atan2(in_site.y(), in_site.x()) - north_heading_rad - bias(in::field));
  result.row[in::rotation] = in_site.x() * in_site.z() / level_square;
  result.row[in::rotation + 1] = in_site.y() * in_site.z() / level_square;
  result.row[in::heading] = -1.0;
  result.row[in::field] = 1.0;
  result.variance = square(sigma_rad);
  return result;
}

FullLinearised FullFilter::height(const Vector3& lever_m, double up_m, double sigma_m, bool by_pressure) const {
  const Vector3 lever = q_body_to_site * lever_m;
  FullLinearised result;
  result.innovation = up_m - position_m.z() - lever.z() - (by_pressure ? bias(in::pressure) : 0.0);
  result.row[in::position + 2] = 1.0;
  result.row.segment<3>(in::rotation) = lever.cross(Vector3::UnitZ());
  result.row[in::pressure] = by_pressure ? 1.0 : 0.0;
  result.variance = square(sigma_m);
  invariant(result);
  return result;
}

FullLinearised FullFilter::velocity(Eigen::Index axis, double speed_mps, double sigma_mps) const {
  FullLinearised result = direct(in::velocity + axis, speed_mps - velocity_mps[axis], sigma_mps);
  invariant(result);
  return result;
}

FullLinearised FullFilter::direct(Eigen::Index state, double innovation, double sigma) {
  FullLinearised result;
  result.innovation = innovation;
  result.row[state] = 1.0;
  result.variance = square(sigma);
  return result;
}

void FullFilter::update(const FullLinearised& measurement, double probability) {
  const FullVector cross = P * measurement.row;
  const double variance = measurement.row.dot(cross) + measurement.variance;
  const FullVector gain = cross / variance;
  correct(probability * measurement.innovation * gain);
  const double spread = probability * (1.0 - probability) * square(measurement.innovation);
  P.noalias() -= (probability * variance - spread) * gain * gain.transpose();
}

void FullFilter::correct(const FullVector& error) {
  const Quaternion turn = rotation_exp(error.segment<3>(in::rotation));
  position_m = pivot_m + turn * (position_m - pivot_m) + error.segment<3>(in::position);
  velocity_mps = turn * velocity_mps + error.segment<3>(in::velocity);
  q_body_to_site = (turn * q_body_to_site).normalized();
  biases += error.tail<full_states - in::gyro>();
}

FullVector FullFilter::difference_to(const FullFilter& other) const {
  FullVector error;
  const Quaternion turn = other.q_body_to_site * q_body_to_site.conjugate();
  error.segment<3>(in::rotation) = rotation_log(turn);
  error.segment<3>(in::position) = other.position_m - pivot_m - turn * (position_m - pivot_m);
  error.segment<3>(in::velocity) = other.velocity_mps - turn * velocity_mps;
  error.tail<full_states - in::gyro>() = other.biases - biases;
  return error;
}

void forget(FullMatrix& covariance, Eigen::Index state, double sigma) {
  covariance.row(state).setZero();
  covariance.col(state).setZero();
  covariance(state, state) = square(sigma);
}

bool FullFilter::healthy() const {
  return position_m.allFinite() && velocity_mps.allFinite() && q_body_to_site.coeffs().allFinite() &&
         biases.allFinite() && P.allFinite() && P.diagonal().minCoeff() >= 0.0;
}

}  // namespace kedge::fusion
