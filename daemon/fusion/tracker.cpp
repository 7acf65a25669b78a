#include "fusion/tracker.h"

#include <algorithm>
#include <cmath>
#include <utility>

namespace kedge::fusion {

namespace {

/// An inertial sample stands for this long at most; then the tag moves unseen.
constexpr TimeNs inertial_hold_ns = 300 * ns_per_ms;
/// Unseen for this long, nothing but the attitude's biases is worth keeping.
constexpr TimeNs gap_max_ns = 10 * ns_per_s;
constexpr double blind_step_s = 0.1;
/// How long to wait for a magnetic field before the configured heading stands alone.
constexpr TimeNs field_wait_ns = 3 * ns_per_s;
constexpr TimeNs sideways_spacing_ns = 100 * ns_per_ms;
constexpr TimeNs range_rate_window_ns = 1'500 * ns_per_ms;
/// At rest: a change of mean force or of range by this much is motion that began softly.
constexpr double leave_force_mps2 = 0.12;
constexpr double leave_rate_mps = 0.1;
constexpr double rest_rate_sigma_max_mps = 0.1;
constexpr TimeNs lean_patience_ns = 4 * ns_per_s;
/// Averaging gravity: a calm accelerometer tells the level at once; a flyer leans into every acceleration.
constexpr double level_time_calm_s = 1.0;
constexpr double level_time_ground_s = 8.0;
constexpr double level_time_air_s = 30.0;
/// Of one magnetic heading, as a share of the slow error that is configured.
constexpr double field_white_share = 0.8;
/// What levelling leaves, as acceleration.
constexpr double tilt_error_ground_mps2 = 0.08;
constexpr double tilt_error_air_mps2 = 1.5;

/// Course against heading: slip and mounting of a vehicle, the gait of a walker.
double slip_of(Profile profile) { return profile == Profile::walker ? radians(4.0) : radians(0.9); }

FilterModel filter_model_of(const Site& site, const Tag& tag) {
  const bool flies = tag.profile == Profile::flyer || tag.profile == Profile::free;
  FilterModel model;
  model.gravity_mps2 = site.gravity_mps2;
  model.accel_density_mps2_rthz = tag.inertial.accel_noise_mps2_rthz;
  model.vibration_mps2 = tag.inertial.vibration_sigma_mps2;
  model.accel_error_mps2 =
      std::hypot(tag.inertial.accel_bias_sigma_mps2, flies ? tilt_error_air_mps2 : tilt_error_ground_mps2);
  model.gyro_noise_radps_rthz = tag.inertial.gyro_noise_radps_rthz;
  model.yaw_rate_bias_radps = tag.inertial.gyro_bias_sigma_radps;
  model.slip_rad = slip_of(tag.profile);
  model.field_sigma_rad = tag.magnetic_heading_sigma_rad;
  model.height_sigma_m = tag.height_sigma_m;
  return model;
}

double sideways_sigma_of(Profile profile) {
  switch (profile) {
    case Profile::wheeled:
      return 0.05;
    case Profile::walker:
      return 0.30;
    case Profile::flyer:
    case Profile::free:
      break;
  }
  return 0.0;
}

}  // namespace

Tracker::Tracker(const Site& site, const Tag& tag)
    : site_(site),
      tag_(tag),
      attitude_model_{.gravity_mps2 = site.gravity_mps2,
                      .magnetic_north_heading_rad = site.magnetic_north_heading_rad,
                      .field_ut = site.field_ut,
                      .dip_rad = site.dip_rad,
                      .gyro_noise_radps_rthz = tag.inertial.gyro_noise_radps_rthz,
                      .gyro_bias_sigma_radps = tag.inertial.gyro_bias_sigma_radps},
      filter_model_(filter_model_of(site, tag)),
      sideways_sigma_mps_(sideways_sigma_of(tag.profile)) {
  reset(true);
}

void Tracker::reset(bool first) {
  state_ = TrackerState{};
  state_.first = first;
  state_.attitude.reset(attitude_model_);
  lead().reset(filter_model_);
}

Outcome Tracker::apply(const Measurement& measurement) {
  if (const auto* inertial = std::get_if<InertialMeasurement>(&measurement.body)) {
    const bool sane = inertial->specific_force_mps2.allFinite() && inertial->angular_rate_radps.allFinite() &&
                      (!inertial->has_field || inertial->magnetic_field_ut.allFinite()) &&
                      inertial->specific_force_mps2.norm() <= 2.0 * tag_.inertial.accel_full_scale_mps2 &&
                      inertial->angular_rate_radps.norm() <= 2.0 * tag_.inertial.gyro_full_scale_radps;
    if (!sane) return {.code = Outcome::Code::implausible};
    InertialMeasurement mean = *inertial;
    if (state_.has_inertial && measurement.time_ns - state_.inertial_ns <= inertial_hold_ns) {
      mean.specific_force_mps2 = 0.5 * (inertial->specific_force_mps2 + state_.inertial.specific_force_mps2);
      mean.angular_rate_radps = 0.5 * (inertial->angular_rate_radps + state_.inertial.angular_rate_radps);
    }
    advance(measurement.time_ns, mean, true);
    return take(*inertial);
  }
  advance(measurement.time_ns, state_.inertial, false);
  return std::visit([&](const auto& body) { return take(body); }, measurement.body);
}

void Tracker::advance(TimeNs time_ns, const InertialMeasurement& held, bool use_field) {
  if (!state_.begun) {
    state_.begun = true;
    state_.begun_ns = time_ns;
    state_.time_ns = time_ns;
  }
  TimeNs left_ns = std::max<TimeNs>(time_ns - state_.time_ns, 0);
  if (left_ns > gap_max_ns) {
    begin_anew_after_gap();
    left_ns = 0;
  }
  const bool seen = state_.has_inertial && state_.time_ns + left_ns - state_.inertial_ns <= inertial_hold_ns;
  state_.time_ns += seen ? left_ns : 0;
  if (seen || left_ns == 0) {
    step(seconds(left_ns), held, use_field, false);
  } else {
    if (state_.has_inertial) state_.attitude.restart();
    state_.at_rest = false;
    state_.stops.clear();
    while (left_ns > 0) {
      const TimeNs part_ns = std::min(left_ns, from_seconds(blind_step_s));
      state_.time_ns += part_ns;
      left_ns -= part_ns;
      step(seconds(part_ns), held, false, true);
    }
  }
  state_.time_ns = std::max(state_.time_ns, time_ns);
}

void Tracker::step(double dt_s, const InertialMeasurement& held, bool use_field, bool blind) {
  AttitudeFilter& attitude = state_.attitude;
  if (!blind && (state_.has_inertial || use_field)) {
    AttitudeInput input;
    input.specific_force_mps2 = held.specific_force_mps2;
    input.angular_rate_radps = held.angular_rate_radps;
    if (use_field && tag_.magnetometer && held.has_field) input.magnetic_field_ut = held.magnetic_field_ut;
    if (located() && points_where_it_goes()) {
      const double heading = attitude.heading_rad() + lead().heading_error_rad();
      const double forward = lead().velocity_mps().head<2>().dot(Vector2(std::cos(heading), std::sin(heading)));
      const double speed = std::clamp(forward, -tag_.speed_max_mps, tag_.speed_max_mps);
      input.motion_mps2 = (held.angular_rate_radps - attitude.gyro_bias_radps).cross(Vector3(speed, 0.0, 0.0));
    }
    const double moving_time_s = points_where_it_goes() ? level_time_ground_s : level_time_air_s;
    input.level_time_s = state_.calm && (state_.at_rest || !state_.moved) ? level_time_calm_s : moving_time_s;
    input.at_rest = state_.at_rest;
    input.dt_s = dt_s;
    turn_attitude(input);
    // Forward, level: gravity's part of the body x axis taken out.
    const double up_share = (attitude.q_body_to_site.conjugate() * Vector3::UnitZ()).x();
    state_.gained_mps += dt_s * (held.specific_force_mps2.x() - up_share * site_.gravity_mps2);
  }
  FilterInput input;
  // The sample holds for the step, so it is turned by the attitude in the middle of it.
  const Vector3 rate = blind ? Vector3::Zero() : Vector3(held.angular_rate_radps - attitude.gyro_bias_radps);
  input.q_body_to_site = attitude.q_body_to_site * rotation_exp(-0.5 * dt_s * rate);
  input.specific_force_mps2 = held.specific_force_mps2;
  input.lever_m = tag_.antenna_in_body_m;
  input.antenna_up_m = antenna_up_m();
  input.dt_s = dt_s;
  input.grounded = !state_.airborne;
  input.at_rest = state_.at_rest;
  input.blind = blind || !attitude.begun;
  for (std::size_t i = 0; i < alive(); ++i) state_.hypotheses[i].filter.predict(filter_model_, input);
  if (!located()) {
    for (Eigen::Index i = 0; i < 6; ++i) lead().set(i, 0.0, 1.0);
  }
  extend_path(dt_s);
}

void Tracker::turn_attitude(const AttitudeInput& input) {
  AttitudeFilter& attitude = state_.attitude;
  const double steered_rad = attitude.steered_rad;
  const Vector3 bias_radps = attitude.gyro_bias_radps;
  attitude.step(attitude_model_, input);
  // The filters keep the attitude filter's error: what the field turned and what became bias is no error any more.
  const double steered = attitude.steered_rad - steered_rad;
  const double bias_change = (attitude.q_body_to_site * (attitude.gyro_bias_radps - bias_radps)).z();
  const double rest_rate = (attitude.q_body_to_site * (input.angular_rate_radps - attitude.gyro_bias_radps)).z();
  const double rate_sigma =
      std::sqrt(std::pow(filter_model_.gyro_noise_radps_rthz, 2) / std::max(input.dt_s, 1e-3) + 1e-6);
  for (std::size_t i = 0; i < alive(); ++i) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    filter.x[at::heading] = wrap_angle(filter.x[at::heading] - steered);
    filter.x[at::yaw_rate] -= bias_change;
    if (input.at_rest) filter.update(filter.direct(at::yaw_rate, rest_rate, rate_sigma));
    if (attitude.field_innovation_rad) {
      const double sigma = field_white_share * tag_.magnetic_heading_sigma_rad;
      filter.update(filter.field(*attitude.field_innovation_rad, sigma));
    }
  }
}

void Tracker::begin_anew_after_gap() {
  const AttitudeFilter attitude = state_.attitude;
  const TimeNs time_ns = state_.time_ns;
  reset(false);
  state_.begun = true;
  state_.begun_ns = time_ns;
  state_.time_ns = time_ns;
  state_.attitude.gyro_bias_radps = attitude.gyro_bias_radps;
  state_.attitude.gyro_bias_variance = attitude.gyro_bias_variance;
  state_.attitude.field_mean_ut = attitude.field_mean_ut;
}

void Tracker::extend_path(double dt_s) {
  if (state_.at_rest || !state_.attitude.begun) return;
  if (points_where_it_goes()) {
    const double heading = state_.attitude.heading_rad();
    state_.path_s += dt_s * Vector2(std::cos(heading), std::sin(heading));
    return;
  }
  // Yaw is free: the course comes from the filter.
  if (!located()) return;
  const Vector2 velocity = lead().velocity_mps().head<2>();
  if (velocity.norm() > 0.3) state_.path_s += dt_s * velocity.normalized();
}

Outcome Tracker::take(const InertialMeasurement& measurement) {
  state_.inertial = measurement;
  state_.has_inertial = true;
  state_.inertial_ns = state_.time_ns;
  state_.stops.add(state_.time_ns, measurement.specific_force_mps2, measurement.angular_rate_radps);
  state_.motion.add(state_.time_ns, state_.attitude.turned_rad, state_.gained_mps);
  if (state_.phase == Phase::waking) wake();
  judge_rest();
  constrain_sideways();
  return {.code = Outcome::Code::used};
}

void Tracker::judge_rest() {
  const bool quiet = state_.stops.quiet(site_.gravity_mps2);
  state_.calm = state_.stops.calm(site_.gravity_mps2);
  if (quiet && !state_.quiet) state_.quiet_since_ns = state_.time_ns;
  state_.quiet = quiet;
  if (state_.stops.loud()) state_.moved = true;
  if (state_.at_rest) {
    if (!quiet || moves_softly()) leave_rest();
    return;
  }
  if (!quiet) return;
  if (ranges_move() || leans()) return;
  // A filter that is wrong about this is refused its ranges and begins anew.
  if (located() && fast()) return;
  come_to_rest();
}

std::optional<RangeRate> Tracker::recent_range_rate() const {
  std::size_t first = first_since(state_.window, state_.time_ns - range_rate_window_ns);
  if (state_.window.size() < first + 10) first = first_since(state_.window, state_.time_ns - 4 * range_rate_window_ns);
  return range_rate(state_.window, first);
}

bool Tracker::ranges_move() const {
  const bool heard = !state_.window.empty() && state_.time_ns - state_.window.back().time_ns < range_rate_window_ns;
  if (!heard) return false;
  const std::optional<RangeRate> rate = recent_range_rate();
  if (!rate || rate->sigma_mps > rest_rate_sigma_max_mps) return true;  // not yet known: wait
  return std::abs(rate->rate_mps) > 3.0 * rate->sigma_mps + 0.05;
}

bool Tracker::leans() const {
  if (state_.time_ns - state_.quiet_since_ns > lean_patience_ns) return false;
  return (state_.attitude.q_body_to_site * state_.stops.mean_force_mps2()).head<2>().norm() > leave_force_mps2;
}

bool Tracker::moves_softly() const {
  if ((state_.stops.mean_force_mps2() - state_.rest_force_mps2).norm() > leave_force_mps2) return true;
  const std::optional<RangeRate> rate = recent_range_rate();
  return rate && std::abs(rate->rate_mps) > 5.0 * rate->sigma_mps + leave_rate_mps;
}

bool Tracker::fast() const {
  const double sigma = std::sqrt(lead().P.diagonal().segment<3>(at::velocity).sum());
  return lead().velocity_mps().norm() - 3.0 * sigma > 0.3;
}

void Tracker::leave_rest() {
  state_.at_rest = false;
  state_.moved = true;
  state_.window.clear();
  // It has moved for some tenths of a second already.
  for (std::size_t i = 0; i < alive(); ++i) {
    FilterMatrix& P = state_.hypotheses[i].filter.P;
    for (Eigen::Index axis = 0; axis < 2; ++axis) P(at::velocity + axis, at::velocity + axis) += 0.04;
  }
}

void Tracker::come_to_rest() {
  state_.at_rest = true;
  state_.rest_force_mps2 = state_.stops.mean_force_mps2();
  if (!located()) return;
  for (std::size_t i = 0; i < alive(); ++i) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    for (Eigen::Index axis = 0; axis < 3; ++axis) filter.update(filter.direct(at::velocity + axis, 0.0, 0.02));
  }
}

void Tracker::constrain_sideways() {
  if (!speed_aided() || !located() || state_.at_rest || sideways_sigma_mps_ <= 0.0) return;
  if (state_.time_ns - state_.sideways_ns < sideways_spacing_ns) return;
  state_.sideways_ns = state_.time_ns;
  for (std::size_t i = 0; i < alive(); ++i) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    filter.update(filter.speed(state_.attitude.heading_rad(), true, 0.0, sideways_sigma_mps_));
  }
}

void Tracker::wake() {
  AttitudeFilter& attitude = state_.attitude;
  if (!attitude.levelled()) return;
  const bool waits_for_field = tag_.magnetometer && state_.time_ns - state_.begun_ns < field_wait_ns;
  if (!attitude.aligned && waits_for_field) return;
  const Opening opening =
      opening_of(state_.first ? tag_.start : std::nullopt, std::exchange(state_.word, std::nullopt));
  if (opening.heading_rad) correct_heading(*opening.heading_rad, opening.heading_sigma_rad);
  state_.phase = Phase::ring;
  if (!opening.position_m || !attitude.aligned) return;
  double nearest_m = 1e9;
  for (const Anchor& anchor : site_.anchors) {
    nearest_m = std::min(nearest_m, (anchor.position_m.head<2>() - *opening.position_m).norm());
  }
  // A start that may lie on either side of the anchor is no place to linearise at.
  const bool vague = opening.position_sigma_m > 1.0 && opening.position_sigma_m > 0.3 * nearest_m;
  if (vague && speed_aided() && points_where_it_goes()) return;
  start_at(*opening.position_m, opening.position_sigma_m);
}

void Tracker::start_at(const Vector2& antenna_m, double sigma_m) {
  PositionFilter& filter = lead();
  const Vector3 lever = lever_in_site_m();
  for (Eigen::Index i = 0; i < 2; ++i) {
    filter.set(at::position + i, antenna_m[i] - lever[i], sigma_m);
    filter.set(at::velocity + i, 0.0, state_.calm ? 0.1 : 0.4 * tag_.speed_max_mps);
  }
  filter.set(at::position + 2, antenna_up_m() - lever.z(), tag_.height_sigma_m);
  filter.set(at::velocity + 2, 0.0, 0.3);
  state_.hypotheses[0].weight = 1.0;
  state_.twins = false;
  state_.phase = Phase::single;
  state_.range_used_ns = state_.time_ns;
  state_.ranges_refused = 0;
}

bool Tracker::healthy() const {
  if (!state_.attitude.q_body_to_site.coeffs().allFinite() || !state_.attitude.gyro_bias_radps.allFinite())
    return false;
  for (std::size_t i = 0; i < alive(); ++i) {
    if (!state_.hypotheses[i].filter.healthy() || !std::isfinite(state_.hypotheses[i].weight)) return false;
  }
  return true;
}

Mode Tracker::mode_of(const Hypothesis& hypothesis) const {
  const PositionFilter& filter = hypothesis.filter;
  const Vector3 lever = level_attitude(filter.heading_error_rad()) * lever_in_site_m();
  Eigen::Matrix<double, 3, filter_states> row = Eigen::Matrix<double, 3, filter_states>::Zero();
  row.block<3, 3>(0, at::position).setIdentity();
  row.col(at::heading) = Vector3::UnitZ().cross(lever);
  Mode mode;
  mode.position_m = filter.position_m() + lever;
  mode.position_covariance_m2 = row * filter.P * row.transpose();
  const Vector3 rate =
      state_.attitude.q_body_to_site * (state_.inertial.angular_rate_radps - state_.attitude.gyro_bias_radps);
  mode.velocity_mps = filter.velocity_mps() + (state_.at_rest ? Vector3::Zero() : Vector3(rate.cross(lever)));
  mode.velocity_covariance_m2ps2 = filter.P.block<3, 3>(at::velocity, at::velocity);
  mode.probability = hypothesis.weight;
  return mode;
}

Estimate Tracker::estimate() const {
  Estimate result;
  result.time_ns = state_.time_ns;
  result.phase = state_.phase;
  result.at_rest = state_.at_rest;
  if (located()) {
    result.lead = mode_of(state_.hypotheses[0]);
    if (state_.twins) result.mirror = mode_of(state_.hypotheses[1]);
  } else if (state_.phase == Phase::ring) {
    result.ring_radius_m = state_.ring_radius_m;
    result.ring_anchor = state_.window_anchor;
  }
  if (state_.attitude.aligned && state_.phase != Phase::waking) {
    result.heading_rad = wrap_angle(state_.attitude.heading_rad() + lead().heading_error_rad());
    result.heading_sigma_rad = std::sqrt(lead().P(at::heading, at::heading));
  }
  if (state_.check && state_.time_ns - state_.check->time_ns < 2 * ns_per_s) {
    result.check_speed_mps = state_.check->speed_mps;
    result.check_speed_sigma_mps = state_.check->sigma_mps;
  }
  result.range_excess_m = state_.range_excess_m;
  result.range_gated_share = state_.range_gated_share;
  result.field_error_share = state_.attitude.field_error_share;
  result.heading_innovation_rad = state_.attitude.heading_innovation_rad;
  return result;
}

}  // namespace kedge::fusion
