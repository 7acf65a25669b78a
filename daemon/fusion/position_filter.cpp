#include "fusion/position_filter.h"

#include <algorithm>
#include <cmath>

namespace kedge::fusion {

namespace {

// First-order Gauss-Markov correlation times.
constexpr double field_time_s = 30.0;
constexpr double slip_time_s = 15.0;
constexpr double accel_time_s = 10.0;
constexpr double height_time_s = 10.0;
constexpr double range_bias_time_s = 600.0;
// Without inertial data: acceleration and turning as white noise of these densities.
constexpr double blind_accel_mps2_rthz = 1.0;
constexpr double blind_turn_radps_rthz = 0.3;
constexpr double yaw_rate_walk_radps_rts = 3e-5;
constexpr double stand_sigma_mps = 0.02;
// Nothing on a site is further, faster or more turned than this, so no covariance need be.
constexpr double position_sigma_max_m = 1e3;
constexpr double velocity_sigma_max_mps = 30.0;
constexpr double heading_sigma_max_rad = 1.8;

double square(double value) { return value * value; }

}  // namespace

void PositionFilter::reset(const FilterModel& model) {
  x.setZero();
  P.setZero();
  P.diagonal().segment<3>(at::position).setConstant(square(position_sigma_max_m));
  P.diagonal().segment<3>(at::velocity).setConstant(1.0);
  P(at::heading, at::heading) = 1.0;
  P(at::field, at::field) = square(model.field_sigma_rad);
  P(at::slip, at::slip) = square(model.slip_rad);
  P(at::yaw_rate, at::yaw_rate) = square(model.yaw_rate_bias_radps);
  P.diagonal().segment<3>(at::accel).setConstant(square(model.accel_error_mps2));
  P(at::range_bias, at::range_bias) = square(model.range_bias_m);
}

struct PositionFilter::Step {
  FilterMatrix F = FilterMatrix::Identity();
  FilterVector q = FilterVector::Zero();  ///< variances added
  double speed_noise = 0.0;               ///< variance of the velocity gained on each axis moved
  double dt_s = 0.0;

  /// A first-order Gauss-Markov state.
  void decay(Eigen::Index state, double time_s, double sigma) {
    const double keep = std::exp(-dt_s / time_s);
    F(state, state) = keep;
    q[state] = square(sigma) * (1.0 - keep * keep);
  }
};

void PositionFilter::predict(const FilterModel& model, const FilterInput& input) {
  if (!(input.dt_s > 0.0)) return;
  Step step;
  step.dt_s = input.dt_s;
  wander(model, input, step);
  const double up_before_m = x[at::position + 2];
  if (input.at_rest) {
    stand(step);
  } else {
    move(model, input, step);
  }
  if (input.grounded) keep_height(model, input, up_before_m, step);

  P = step.F * P * step.F.transpose();
  P.diagonal() += step.q;
  for (Eigen::Index axis = 0; axis < (input.grounded ? 2 : 3); ++axis) {
    // A sample's error lasts for the step (eq. 27).
    const Eigen::Index p = at::position + axis;
    const Eigen::Index v = at::velocity + axis;
    P(v, v) += step.speed_noise;
    P(p, v) += 0.5 * step.dt_s * step.speed_noise;
    P(v, p) += 0.5 * step.dt_s * step.speed_noise;
    P(p, p) += 0.25 * square(step.dt_s) * step.speed_noise;
  }
  P = (0.5 * (P + P.transpose())).eval();
  limit();
}

void PositionFilter::wander(const FilterModel& model, const FilterInput& input, Step& step) {
  step.decay(at::field, field_time_s, model.field_sigma_rad);
  for (Eigen::Index i = 0; i < 3; ++i) step.decay(at::accel + i, accel_time_s, model.accel_error_mps2);
  if (!input.at_rest) {
    step.decay(at::range_bias, range_bias_time_s, model.range_bias_m);
    step.decay(at::slip, slip_time_s, model.slip_rad);
    step.F(at::heading, at::yaw_rate) = -step.dt_s;
    step.q[at::yaw_rate] = square(yaw_rate_walk_radps_rts) * step.dt_s;
    step.q[at::heading] = square(input.blind ? blind_turn_radps_rthz : model.gyro_noise_radps_rthz) * step.dt_s;
  }
}

void PositionFilter::stand(Step& step) {
  step.F.block<3, 3>(at::velocity, at::velocity).setZero();
  step.q.segment<3>(at::velocity).setConstant(square(stand_sigma_mps));
  x.segment<3>(at::velocity).setZero();
  decay_state(step);
}

void PositionFilter::move(const FilterModel& model, const FilterInput& input, Step& step) {
  const double dt = step.dt_s;
  Vector3 acceleration = Vector3::Zero();
  step.speed_noise = square(blind_accel_mps2_rthz) * dt;
  if (!input.blind) {
    const Matrix3 R = (level_attitude(heading_error_rad()) * input.q_body_to_site).toRotationMatrix();
    const Vector3 force = R * (input.specific_force_mps2 - x.segment<3>(at::accel));
    acceleration = force - Vector3(0.0, 0.0, model.gravity_mps2);
    step.F.block<3, 3>(at::velocity, at::accel) = -dt * R;
    step.F.block<3, 1>(at::velocity, at::heading) = dt * Vector3::UnitZ().cross(force);
    step.F.block<3, 3>(at::position, at::accel) = -0.5 * dt * dt * R;
    step.F.block<3, 1>(at::position, at::heading) = 0.5 * dt * dt * Vector3::UnitZ().cross(force);
    step.speed_noise = square(model.accel_density_mps2_rthz) * dt + square(model.vibration_mps2 * dt);
  }
  step.F.block<3, 3>(at::position, at::velocity) = dt * Matrix3::Identity();
  x.segment<3>(at::position) += dt * velocity_mps() + 0.5 * dt * dt * acceleration;
  x.segment<3>(at::velocity) += dt * acceleration;
  x[at::heading] = wrap_angle(x[at::heading] - dt * x[at::yaw_rate]);
  decay_state(step);
}

void PositionFilter::decay_state(const Step& step) {
  for (const Eigen::Index state : {at::accel, at::accel + 1, at::accel + 2, at::range_bias, at::field, at::slip}) {
    x[state] *= step.F(state, state);
  }
}

void PositionFilter::keep_height(const FilterModel& model, const FilterInput& input, double up_before_m, Step& step) {
  const Eigen::Index z = at::position + 2;
  const Eigen::Index climb = at::velocity + 2;
  step.F.row(z).setZero();
  step.F.row(climb).setZero();
  step.decay(z, height_time_s, model.height_sigma_m);
  const double up = input.antenna_up_m - (input.q_body_to_site * input.lever_m).z();
  x[z] = up + step.F(z, z) * (up_before_m - up);
  x[climb] = 0.0;
  step.q[climb] = square(0.05);
}

void PositionFilter::limit() {
  const auto cap = [&](Eigen::Index state, double sigma_max) {
    const double sigma = std::sqrt(P(state, state));
    if (!(sigma > sigma_max)) return;
    const double shrink = sigma_max / sigma;  // a congruence: the matrix stays positive
    P.row(state) *= shrink;
    P.col(state) *= shrink;
  };
  for (Eigen::Index i = 0; i < 3; ++i) {
    cap(at::position + i, position_sigma_max_m);
    cap(at::velocity + i, velocity_sigma_max_mps);
  }
  cap(at::heading, heading_sigma_max_rad);
}

Linearised PositionFilter::range(const Vector3& anchor_m, const Vector3& lever_in_site_m, double range_m,
                                 double sigma_m) const {
  const Vector3 lever = level_attitude(heading_error_rad()) * lever_in_site_m;
  const Vector3 line = position_m() + lever - anchor_m;
  const double distance = std::max(line.norm(), 1e-3);
  const Vector3 unit = line / distance;
  Linearised result;
  result.innovation = range_m - distance - x[at::range_bias];
  result.row.segment<3>(at::position) = unit;
  result.row[at::heading] = unit.dot(Vector3::UnitZ().cross(lever));
  result.row[at::range_bias] = 1.0;
  // What the curvature of the circle hides from the linear model counts as noise (eq. 29).
  const Matrix3 across = Matrix3::Identity() - unit * unit.transpose();
  const Matrix3 spread = across * P.block<3, 3>(at::position, at::position) * across;
  result.variance = square(sigma_m) + 0.5 * spread.squaredNorm() / square(std::max(distance, 0.3));
  return result;
}

Linearised PositionFilter::speed(double heading_rad, bool across, double speed_mps, double sigma_mps) const {
  const double course = heading_rad + heading_error_rad() + x[at::slip];
  const Vector2 forward(std::cos(course), std::sin(course));
  const Vector2 left(-forward.y(), forward.x());
  const Vector2 velocity = x.segment<2>(at::velocity);
  const Vector2& axis = across ? left : forward;
  Linearised result;
  result.innovation = speed_mps - axis.dot(velocity);
  result.row.segment<2>(at::velocity) = axis;
  // Turning the course by a small angle trades one component for the other.
  result.row[at::heading] = across ? -forward.dot(velocity) : left.dot(velocity);
  result.row[at::slip] = result.row[at::heading];
  result.variance = square(sigma_mps);
  return result;
}

Linearised PositionFilter::field(double innovation_rad, double sigma_rad) const {
  Linearised result;
  result.innovation = wrap_angle(innovation_rad - x[at::heading] - x[at::field]);
  result.row[at::heading] = 1.0;
  result.row[at::field] = 1.0;
  result.variance = square(sigma_rad);
  return result;
}

Linearised PositionFilter::direct(Eigen::Index state, double value, double sigma) const {
  Linearised result;
  result.innovation = state == at::heading ? wrap_angle(value - x[state]) : value - x[state];
  result.row[state] = 1.0;
  result.variance = square(sigma);
  return result;
}

void PositionFilter::update(const Linearised& measurement, double probability) {
  const FilterVector cross = P * measurement.row;
  const double variance = measurement.row.dot(cross) + measurement.variance;
  const FilterVector gain = cross / variance;
  x += probability * measurement.innovation * gain;
  x[at::heading] = wrap_angle(x[at::heading]);
  const double spread = probability * (1.0 - probability) * square(measurement.innovation);
  P -= (probability * variance - spread) * gain * gain.transpose();
  P = (0.5 * (P + P.transpose())).eval();
}

void PositionFilter::set(Eigen::Index state, double value, double sigma) {
  P.row(state).setZero();
  P.col(state).setZero();
  x[state] = value;
  P(state, state) = square(sigma);
}

bool PositionFilter::healthy() const { return x.allFinite() && P.allFinite() && P.diagonal().minCoeff() >= 0.0; }

}  // namespace kedge::fusion
