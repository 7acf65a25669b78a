#include "fusion/standard_tracker.h"

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
/// The covariance may lag behind by this much.
constexpr double catch_up_s = 0.05;
/// How long to wait for a magnetic field before the configured heading stands alone.
constexpr TimeNs field_wait_ns = 3 * ns_per_s;
constexpr TimeNs profile_spacing_ns = 100 * ns_per_ms;
constexpr TimeNs field_spacing_ns = 45 * ns_per_ms;
constexpr TimeNs height_spacing_ns = ns_per_s;
/// Heights a second apart err alike over the height's correlation time: so many count as one.
constexpr double height_repeats = 3.0;
/// At rest: a change of mean force or of range by this much is motion that began softly.
constexpr double leave_force_mps2 = 0.12;
constexpr double leave_rate_mps = 0.1;
constexpr double rest_rate_sigma_max_mps = 0.1;
constexpr TimeNs lean_patience_ns = 4 * ns_per_s;
constexpr TimeNs free_rest_ns = 2'500 * ns_per_ms;
constexpr double rest_speed_sigma_mps = 0.03;
constexpr double rest_turn_sigma_radps = 2e-4;
/// Standing, the field is heard for so long; then its wandering would only be taken for turning.
constexpr TimeNs rest_field_ns = 5 * ns_per_s;
constexpr double level_time_calm_s = 1.0;
constexpr double level_time_ground_s = 8.0;
constexpr double level_time_air_s = 30.0;
/// White part of one magnetic heading, as a share of the slow error that is configured.
constexpr double field_white_share = 0.7;
constexpr double field_share_good = 0.15;
constexpr double field_share_bad = 0.35;
/// What share of p1 + p2 must be there to call it a position, and from where on a second one is told.
constexpr double located_share = 0.8;
constexpr double mirror_share = 0.04;

FullModel model_of(const Site& site, const Tag& tag) {
  FullModel model;
  model.gravity_mps2 = site.gravity_mps2;
  model.accel_density_mps2_rthz = tag.inertial.accel_noise_mps2_rthz;
  model.vibration_mps2 = tag.inertial.vibration_sigma_mps2;
  model.accel_bias_mps2 = tag.inertial.accel_bias_sigma_mps2;
  model.gyro_density_radps_rthz = tag.inertial.gyro_noise_radps_rthz;
  model.gyro_bias_radps = tag.inertial.gyro_bias_sigma_radps;
  model.field_sigma_rad = tag.magnetic_heading_sigma_rad;
  model.slip_rad = tag.profile == Profile::walker ? radians(4.0) : radians(0.6);
  model.mounting_rad = tag.profile == Profile::walker ? radians(10.0) : radians(0.5);
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

StandardTracker::StandardTracker(const Site& site, const Tag& tag)
    : site_(site),
      tag_(tag),
      attitude_model_{.gravity_mps2 = site.gravity_mps2,
                      .magnetic_north_heading_rad = site.magnetic_north_heading_rad,
                      .field_ut = site.field_ut,
                      .dip_rad = site.dip_rad,
                      .gyro_noise_radps_rthz = tag.inertial.gyro_noise_radps_rthz,
                      .gyro_bias_sigma_radps = tag.inertial.gyro_bias_sigma_radps},
      model_(model_of(site, tag)),
      sideways_sigma_mps_(sideways_sigma_of(tag.profile)) {
  reset(true);
}

void StandardTracker::reset(bool first) {
  state_ = StandardState{};
  state_.first = first;
  state_.attitude.reset(attitude_model_);
}

Outcome StandardTracker::apply(const Measurement& measurement) {
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

void StandardTracker::advance(TimeNs time_ns, const InertialMeasurement& held, bool use_field) {
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
  if (seen || left_ns == 0) {
    step(seconds(left_ns), held, use_field, false);
  } else {
    if (state_.has_inertial) state_.attitude.restart();
    state_.at_rest = false;
    state_.stops.clear();
    while (left_ns > 0) {
      const TimeNs part_ns = std::min(left_ns, from_seconds(blind_step_s));
      left_ns -= part_ns;
      step(seconds(part_ns), held, false, true);
      catch_up();
    }
  }
  state_.time_ns = std::max(state_.time_ns, time_ns);
}

void StandardTracker::step(double dt_s, const InertialMeasurement& held, bool use_field, bool blind) {
  if (!blind && (state_.has_inertial || use_field)) {
    level(dt_s, held, use_field);
    state_.turned_rad += dt_s * held.angular_rate_radps;
    state_.turned_s += dt_s;
  }
  for (Component& component : state_.mixture) {
    if (blind) {
      component.filter.coast(dt_s);
    } else {
      component.filter.move(model_, held.specific_force_mps2, held.angular_rate_radps, dt_s);
    }
  }
  if (located() && lead().waiting_s() >= catch_up_s) catch_up();
  if (state_.at_rest || !state_.attitude.begun) return;
  if (points_where_it_goes()) {
    const double heading = located() ? lead().heading_rad() : state_.attitude.heading_rad();
    state_.check.extend(Vector2(std::cos(heading), std::sin(heading)), dt_s);
  } else if (located() && lead().velocity_mps.head<2>().norm() > 0.3) {
    // Yaw is free: the course comes from the filter.
    state_.check.extend(lead().velocity_mps.head<2>().normalized(), dt_s);
  }
}

void StandardTracker::level(double dt_s, const InertialMeasurement& held, bool use_field) {
  AttitudeFilter& attitude = state_.attitude;
  AttitudeInput input;
  input.specific_force_mps2 = held.specific_force_mps2;
  input.angular_rate_radps = held.angular_rate_radps;
  if (use_field && tag_.magnetometer && held.has_field) input.magnetic_field_ut = held.magnetic_field_ut;
  if (located() && points_where_it_goes()) {
    const double forward = (lead().q_body_to_site.conjugate() * lead().velocity_mps).x();
    const double speed = std::clamp(forward, -tag_.speed_max_mps, tag_.speed_max_mps);
    input.motion_mps2 = (held.angular_rate_radps - attitude.gyro_bias_radps).cross(Vector3(speed, 0.0, 0.0));
  }
  const double moving_time_s = points_where_it_goes() ? level_time_ground_s : level_time_air_s;
  input.level_time_s = state_.calm && (state_.at_rest || !state_.moved) ? level_time_calm_s : moving_time_s;
  input.at_rest = state_.at_rest;
  input.dt_s = dt_s;
  attitude.step(attitude_model_, input);
  const Quaternion& q = located() ? lead().q_body_to_site : attitude.q_body_to_site;
  // Forward, level: gravity's part of the body x axis taken out.
  const double up_share = (q.conjugate() * Vector3::UnitZ()).x();
  state_.gained_mps += dt_s * (held.specific_force_mps2.x() - up_share * site_.gravity_mps2);
}

void StandardTracker::begin_anew_after_gap() {
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

void StandardTracker::catch_up() {
  const bool vibrating = !(state_.at_rest || (state_.calm && !state_.moved));
  for (Component& component : state_.mixture) component.filter.catch_up(model_, vibrating, state_.at_rest);
}

Outcome StandardTracker::take(const InertialMeasurement& measurement) {
  state_.inertial = measurement;
  state_.has_inertial = true;
  state_.inertial_ns = state_.time_ns;
  state_.stops.add(state_.time_ns, measurement.specific_force_mps2, measurement.angular_rate_radps);
  state_.motion.add(state_.time_ns, state_.attitude.turned_rad, state_.gained_mps);
  if (!state_.awake) wake();
  judge_rest();
  if (!located()) return {.code = Outcome::Code::used};
  hold_to_profile();
  if (tag_.magnetometer && measurement.has_field) take_field(measurement.magnetic_field_ut);
  return {.code = Outcome::Code::used};
}

void StandardTracker::judge_rest() {
  const bool quiet = state_.stops.quiet(site_.gravity_mps2);
  state_.calm = state_.stops.calm(site_.gravity_mps2);
  if (quiet && !state_.quiet) state_.quiet_since_ns = state_.time_ns;
  state_.quiet = quiet;
  if (state_.stops.loud() && !state_.calm) state_.moved = true;
  if (state_.at_rest) {
    if (quiet && !moves_softly()) return;
    state_.at_rest = false;
    state_.moved = true;
    state_.check.clear();
    // It has moved for some tenths of a second already.
    for (Component& component : state_.mixture) {
      for (Eigen::Index axis = 0; axis < 2; ++axis) {
        component.filter.P(in::velocity + axis, in::velocity + axis) += 0.01;
      }
    }
    return;
  }
  if (!quiet || ranges_move() || leans() || (located() && fast())) return;
  // What may turn on the spot is not at rest for a moment between two turns.
  if (!points_where_it_goes() && state_.time_ns - state_.quiet_since_ns < free_rest_ns) return;
  state_.at_rest = true;
  state_.rest_since_ns = state_.time_ns;
  state_.rest_force_mps2 = state_.stops.mean_force_mps2();
}

bool StandardTracker::ranges_move() const {
  if (!state_.check.heard(state_.time_ns)) return false;
  const std::optional<RangeRate> rate = state_.check.rate(state_.time_ns);
  if (!rate || rate->sigma_mps > rest_rate_sigma_max_mps) return true;  // not yet known: wait
  return std::abs(rate->rate_mps) > 3.0 * rate->sigma_mps + 0.05;
}

bool StandardTracker::stands() const { return state_.at_rest || (state_.calm && !state_.moved && !ranges_move()); }

bool StandardTracker::leans() const {
  if (state_.time_ns - state_.quiet_since_ns > lean_patience_ns) return false;
  const Quaternion& q = located() ? lead().q_body_to_site : state_.attitude.q_body_to_site;
  return (q * state_.stops.mean_force_mps2()).head<2>().norm() > leave_force_mps2;
}

bool StandardTracker::moves_softly() const {
  if ((state_.stops.mean_force_mps2() - state_.rest_force_mps2).norm() > leave_force_mps2) return true;
  const std::optional<RangeRate> rate = state_.check.rate(state_.time_ns);
  return rate && std::abs(rate->rate_mps) > 5.0 * rate->sigma_mps + leave_rate_mps;
}

bool StandardTracker::fast() const {
  const double sigma = std::sqrt(lead().level_covariance().bottomRightCorner<2, 2>().trace());
  return lead().velocity_mps.norm() - 3.0 * sigma > 0.3;
}

void StandardTracker::hold_to_profile() {
  if (state_.time_ns - state_.constrained_ns < profile_spacing_ns) return;
  state_.constrained_ns = state_.time_ns;
  catch_up();
  const Vector3 rate = state_.inertial.angular_rate_radps;
  if (stands()) {
    for (Eigen::Index axis = 0; axis < 3; ++axis) {
      update_all([&](const FullFilter& f) { return f.velocity(axis, 0.0, rest_speed_sigma_mps); }, true);
      if (!state_.at_rest || !(state_.turned_s > 0.0)) continue;
      const double sigma =
          std::hypot(model_.gyro_density_radps_rthz / std::sqrt(state_.turned_s), rest_turn_sigma_radps);
      const double turning = state_.turned_rad[axis] / state_.turned_s;
      update_all(
          [&](const FullFilter& f) {
            return FullFilter::direct(in::gyro + axis, turning - f.gyro_bias_radps()[axis], sigma);
          },
          false);
    }
  } else if (points_where_it_goes()) {
    for (const int axis : {1, 2}) {
      update_all(
          [&](const FullFilter& f) {
            return f.speed(axis, tag_.antenna_in_body_m, rate - f.gyro_bias_radps(), 0.0, sideways_sigma_mps_);
          },
          true);
    }
  }
  state_.turned_rad.setZero();
  state_.turned_s = 0.0;
  if (state_.airborne || state_.time_ns - state_.height_ns < height_spacing_ns) return;
  state_.height_ns = state_.time_ns;
  const double sigma = tag_.height_sigma_m * std::sqrt(height_repeats);
  update_all([&](const FullFilter& f) { return f.height(tag_.antenna_in_body_m, antenna_up_m(), sigma, false); },
             false);
}

void StandardTracker::take_field(const Vector3& field_ut) {
  if (state_.time_ns - state_.field_ns < field_spacing_ns) return;
  if (state_.at_rest && state_.time_ns - state_.rest_since_ns > rest_field_ns) return;
  const double strength = field_ut.norm();
  const double expected = site_.field_ut.value_or(state_.attitude.field_mean_ut);
  const Vector3 in_site = lead().q_body_to_site * field_ut;
  const double level = in_site.head<2>().norm();
  if (!(expected > 1.0) || level < 0.05 * expected) return;
  double share = std::abs(strength - expected) / expected;
  if (site_.dip_rad) {
    const double dip = std::atan2(-in_site.z(), level);
    share = std::max(share, std::abs(2.0 * std::sin(0.5 * (dip - *site_.dip_rad))));
  }
  if (share >= field_share_bad) return;
  const double trust = std::min(1.0, (field_share_bad - share) / (field_share_bad - field_share_good));
  const double sigma = field_white_share * tag_.magnetic_heading_sigma_rad / trust;
  state_.field_ns = state_.time_ns;
  catch_up();
  update_all([&](const FullFilter& f) { return f.field(field_ut, site_.magnetic_north_heading_rad, sigma); }, true);
}

void StandardTracker::wake() {
  AttitudeFilter& attitude = state_.attitude;
  if (!attitude.levelled()) return;
  const bool waits_for_field = tag_.magnetometer && state_.time_ns - state_.begun_ns < field_wait_ns;
  if (!attitude.aligned && waits_for_field) return;
  const Opening opening =
      opening_of(state_.first ? tag_.start : std::nullopt, std::exchange(state_.word, std::nullopt));
  if (opening.heading_rad) correct_heading(*opening.heading_rad, opening.heading_sigma_rad);
  state_.awake = true;
  if (!opening.position_m || !(attitude.aligned || state_.told_heading_rad)) return;
  double nearest_m = 1e9;
  for (const Anchor& anchor : site_.anchors) {
    nearest_m = std::min(nearest_m, (anchor.position_m.head<2>() - *opening.position_m).norm());
  }
  // A start that may lie on either side of the anchor is no place to linearise at.
  if (opening.position_sigma_m > 1.0 && opening.position_sigma_m > 0.3 * nearest_m) return;
  start_at(*opening.position_m, opening.position_sigma_m);
}

bool StandardTracker::healthy() const {
  if (!state_.attitude.q_body_to_site.coeffs().allFinite()) return false;
  return std::all_of(state_.mixture.begin(), state_.mixture.end(), [](const Component& component) {
    return component.filter.healthy() && std::isfinite(component.weight);
  });
}

Estimate StandardTracker::estimate() const {
  const auto mode_of = [](const Cluster& cluster) {
    return Mode{cluster.position_m, cluster.position_covariance_m2, cluster.velocity_mps,
                cluster.velocity_covariance_m2ps2, cluster.weight};
  };
  Estimate result;
  result.time_ns = state_.time_ns;
  result.at_rest = state_.at_rest;
  result.phase = state_.awake ? Phase::ring : Phase::waking;
  if (state_.awake) {
    result.ring_radius_m = state_.check.ring_radius_m();
    result.ring_anchor = state_.check.anchor();
  }
  if (located()) {
    const Clusters clusters = state_.mixture.clusters(tag_.antenna_in_body_m, state_.inertial.angular_rate_radps);
    const double second = clusters.second ? clusters.second->weight : 0.0;
    const double spread = std::sqrt(clusters.lead.position_covariance_m2.topLeftCorner<2, 2>().trace());
    const double away = state_.check.ring_radius_m().value_or(1e3);
    if (clusters.lead.weight + second >= located_share && spread < std::max(3.0, 0.4 * away)) {
      result.phase = second >= mirror_share ? Phase::twofold : Phase::single;
      result.lead = mode_of(clusters.lead);
      if (result.phase == Phase::twofold) result.mirror = mode_of(*clusters.second);
      result.ring_radius_m.reset();
    }
    result.heading_rad = wrap_angle(lead().heading_rad());
    result.heading_sigma_rad = std::sqrt(lead().P(in::heading, in::heading));
  } else if (state_.attitude.aligned && state_.awake) {
    result.heading_rad = state_.attitude.heading_rad();
    result.heading_sigma_rad = tag_.magnetic_heading_sigma_rad;
  }
  if (const std::optional<WindowSpeed> speed = state_.check.speed(state_.time_ns)) {
    result.check_speed_mps = speed->speed_mps;
    result.check_speed_sigma_mps = speed->sigma_mps;
  }
  result.range_excess_m = state_.range_excess_m;
  result.range_gated_share = state_.range_gated_share;
  result.field_error_share = state_.attitude.field_error_share;
  result.heading_innovation_rad = state_.attitude.heading_innovation_rad;
  return result;
}

}  // namespace kedge::fusion
