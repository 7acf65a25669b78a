#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>

#include "fusion/standard_tracker.h"

namespace kedge::fusion {

namespace {

/// Across the line of sight a seed is so wide that the circle bends away by this much from a straight line.
constexpr double seed_bend_m = 0.03;
constexpr double seed_along_sigma_m = 0.5;
constexpr int seeds_min = 24;
constexpr int seeds_max = 96;
constexpr double tilt_sigma_calm_rad = radians(0.15);
constexpr double level_lag_s = 0.7;
constexpr double tilt_sigma_moving_rad = radians(2.0);
constexpr double tilt_sigma_air_rad = radians(4.0);
constexpr double heading_start_sigma_rad = radians(1.0);
constexpr double dip_typical_rad = radians(60.0);
constexpr double gyro_bias_sigma_min_radps = 5e-5;
/// Speeds of the bank when the tag is in motion already: forward for what points where it goes.
constexpr int bank_bearings = 72;
constexpr int bank_speeds = 7;
/// Velocities of what does not: directions times speeds, and none.
constexpr int free_bearings = 36;
constexpr int free_directions = 8;
constexpr int free_speeds = 3;
constexpr double free_speed_max_mps = 6.0;
constexpr double rate_sigma_min_mps = 0.1;
constexpr double course_sigma_mps = 0.05;
/// A seed is worth having above this share of the best.
constexpr double seed_share_min = 1e-3;
/// Room that the bank leaves for what is there already.
constexpr std::size_t keep_max = 8;
constexpr double mirror_weight = 0.002;
/// A component under which the circle bends by more than this is split.
constexpr double split_bend_m = 0.008;
constexpr std::size_t split_max = 280;
constexpr double split_weight_min = 1e-5;
constexpr double range_min_m = 0.5;

struct Candidate {
  double bearing_rad = 0.0;
  Vector2 velocity_mps = Vector2::Zero();
  double weight = 0.0;
};

constexpr std::size_t candidates_max = std::size_t{free_bearings} * (std::size_t{free_directions} * free_speeds + 1);
static_assert(candidates_max >= std::size_t{bank_bearings} * bank_speeds);
using Candidates = std::array<Candidate, candidates_max>;

double square(double value) { return value * value; }
Vector2 direction(double angle_rad) { return {std::cos(angle_rad), std::sin(angle_rad)}; }

/// Bearings times velocities for a tag that moves already.
struct MovingBank {
  std::optional<Vector2> course;  ///< the velocity lies along it
  int bearings = 0;
  int velocities = 0;
  double speed_step_mps = 0.0;
  double speed_from_mps = 0.0;

  /// Forward, from a little backward on.
  static MovingBank along(const Vector2& course, double top_mps) {
    return {course, bank_bearings, bank_speeds, 1.2 * top_mps / (bank_speeds - 1), -0.1 * top_mps};
  }
  /// Rings of speed in all directions, and none.
  static MovingBank free(double top_mps) {
    return {std::nullopt, free_bearings, free_directions * free_speeds + 1, top_mps / free_speeds, 0.0};
  }
  [[nodiscard]] double bearing_sigma_rad() const { return std::numbers::pi / bearings; }
  [[nodiscard]] double speed_sigma_mps() const { return 0.5 * speed_step_mps; }
  [[nodiscard]] Vector2 velocity_mps(int index) const {
    if (course) return (speed_from_mps + index * speed_step_mps) * *course;
    if (index == 0) return Vector2::Zero();
    const int ring = (index - 1) / free_directions;
    const double angle = 2.0 * std::numbers::pi * ((index - 1) % free_directions) / free_directions;
    return (1 + ring) * speed_step_mps * direction(angle);
  }

  /// All of them, weighed by the range's rate; how many (eq. 58).
  std::size_t fill(Candidates& candidates, const RangeRate& rate) const {
    std::size_t count = 0;
    for (int b = 0; b < bearings; ++b) {
      for (int k = 0; k < velocities; ++k) {
        Candidate& candidate = candidates[count++];
        candidate.bearing_rad = 2.0 * std::numbers::pi * b / bearings;
        candidate.velocity_mps = velocity_mps(k);
        const Vector2 away = direction(candidate.bearing_rad);
        const double across = candidate.velocity_mps.dot(Vector2(-away.y(), away.x()));
        const double spread = (course ? course->dot(away) : 1.0) * speed_sigma_mps();
        const double variance = square(rate.sigma_mps) + square(spread) + square(across * bearing_sigma_rad());
        const double off = rate.rate_mps - candidate.velocity_mps.dot(away);
        candidate.weight = std::exp(-0.5 * square(off) / variance) / std::sqrt(variance);
      }
    }
    return count;
  }
};

/// Level velocity with the bank's spread, turning with the heading where it follows it. The covariance comes in plain
/// and leaves in the filter's own coordinates.
void give_velocity(FullFilter& filter, const Vector2& velocity_mps, const MovingBank& bank) {
  filter.velocity_mps.head<2>() = velocity_mps;
  for (Eigen::Index axis = 0; axis < 2; ++axis) forget(filter.P, in::velocity + axis, 0.0);
  if (bank.course) {
    filter.velocity_mps.z() = 0.0;
    filter.P.block<2, 2>(in::velocity, in::velocity) =
        square(bank.speed_sigma_mps()) * *bank.course * bank.course->transpose() +
        square(course_sigma_mps) * Matrix2::Identity();
    FullMatrix turn = FullMatrix::Identity();
    turn.block<2, 1>(in::velocity, in::heading) = Vector2(-velocity_mps.y(), velocity_mps.x());
    filter.P = (turn * filter.P * turn.transpose()).eval();
  } else {
    filter.P.block<2, 2>(in::velocity, in::velocity) = square(bank.speed_sigma_mps()) * Matrix2::Identity();
  }
  filter.set_plain_covariance(filter.P);
}

}  // namespace

Vector3 StandardTracker::pivot_m() const {
  return site_.anchors.empty() ? Vector3(Vector3::Zero()) : site_.anchors[state_.check.anchor()].position_m;
}

Component StandardTracker::waking_component() const {
  const AttitudeFilter& attitude = state_.attitude;
  Component component;
  component.weight = 1.0;
  FullFilter& filter = component.filter;
  filter.reset(model_, pivot_m());
  filter.q_body_to_site = attitude.q_body_to_site;
  filter.biases.head<3>() = attitude.gyro_bias_radps;
  filter.P.diagonal().segment<3>(in::gyro).setConstant(
      std::max(attitude.gyro_bias_variance, square(gyro_bias_sigma_min_radps)));
  // Level from gravity: what the accelerometer reads too much, the attitude leans (eq. 56).
  FullMatrix common = FullMatrix::Identity();
  filter.P.block<3, 3>(in::rotation, in::rotation).setZero();
  // Averaging gravity lags behind what the bias turns.
  const double lag_sigma = std::sqrt(attitude.gyro_bias_variance) * level_lag_s;
  const double tilt_sigma = state_.calm ? std::hypot(tilt_sigma_calm_rad, lag_sigma)
                                        : (points_where_it_goes() ? tilt_sigma_moving_rad : tilt_sigma_air_rad);
  filter.P.diagonal().segment<2>(in::rotation).setConstant(square(tilt_sigma));
  common.block<3, 3>(in::rotation, in::accel) =
      skew(Vector3::UnitZ()) * filter.q_body_to_site.toRotationMatrix() / site_.gravity_mps2;
  common.row(in::heading).setZero();
  common(in::heading, in::heading) = 1.0;
  filter.P = (common * filter.P * common.transpose()).eval();
  filter.P(in::heading, in::heading) = square(1.8);
  if (attitude.aligned && tag_.magnetometer) {
    // The heading is the field's, so that it errs as the field does (eq. 57).
    const double dip = site_.dip_rad.value_or(dip_typical_rad);
    const double north = site_.magnetic_north_heading_rad;
    const Vector3 field(std::cos(dip) * std::cos(north), std::cos(dip) * std::sin(north), -std::sin(dip));
    filter.update(filter.field(filter.q_body_to_site.conjugate() * field, north, heading_start_sigma_rad));
  }
  if (state_.told_heading_rad) {
    const double innovation = wrap_angle(*state_.told_heading_rad - filter.heading_rad());
    filter.update(FullFilter::direct(in::heading, innovation, state_.told_heading_sigma_rad));
  }
  filter.position_m.z() = antenna_up_m() - (filter.q_body_to_site * tag_.antenna_in_body_m).z();
  forget(filter.P, in::position + 2, tag_.height_sigma_m);
  filter.velocity_mps.setZero();
  const double speed_sigma = state_.calm ? 0.1 : 0.4 * tag_.speed_max_mps;
  for (Eigen::Index i = 0; i < 3; ++i) forget(filter.P, in::velocity + i, i < 2 ? speed_sigma : 0.3);
  return component;
}

void StandardTracker::start_at(const Vector2& antenna_m, double sigma_m) {
  Component component = waking_component();
  const Vector3 lever = component.filter.q_body_to_site * tag_.antenna_in_body_m;
  component.filter.position_m.head<2>() = antenna_m - lever.head<2>();
  for (Eigen::Index i = 0; i < 2; ++i) forget(component.filter.P, in::position + i, sigma_m);
  component.filter.set_plain_covariance(component.filter.P);
  state_.mixture.clear();
  state_.mixture.add(component);
  state_.first = false;
}

void StandardTracker::place(Component& component, double range_m, double bearing_rad, double across_sigma_m) const {
  FullFilter& filter = component.filter;
  const Vector2 away = direction(bearing_rad);
  const Vector3 lever = filter.q_body_to_site * tag_.antenna_in_body_m;
  const Vector2 anchor = site_.anchors[state_.check.anchor()].position_m.head<2>();
  filter.position_m.head<2>() = anchor + range_m * away - lever.head<2>();
  for (Eigen::Index i = 0; i < 2; ++i) forget(filter.P, in::position + i, 0.0);
  const Vector2 across(-away.y(), away.x());
  filter.P.block<2, 2>(in::position, in::position) =
      square(seed_along_sigma_m) * away * away.transpose() + square(across_sigma_m) * across * across.transpose();
}

void StandardTracker::seed(double weight) {
  const std::optional<double> range_m = state_.check.level_range_m(state_.time_ns);
  if (!range_m) return;
  state_.mixture.order();
  state_.mixture.thin(1e-3);
  while (state_.mixture.size() > keep_max) state_.mixture.drop_lightest();
  Component base = waking_component();
  if (located() && state_.airborne) {
    // What pressure says stays true.
    base.filter.position_m.z() = lead().position_m.z();
    base.filter.velocity_mps.z() = lead().velocity_mps.z();
    base.filter.bias(in::pressure) = lead().bias(in::pressure);
  }
  for (Component& component : state_.mixture) {
    component.weight *= 1.0 - weight;
    component.filter.set_pivot(pivot_m());
  }
  if (stands()) {
    seed_standing(base, *range_m, weight);
  } else {
    seed_moving(base, *range_m, weight);
  }
  if (state_.first && tag_.start) {
    // A vague start still tells the sides apart.
    for (Component& component : state_.mixture) {
      const double far = (component.filter.position_m.head<2>() - tag_.start->position_m).squaredNorm();
      component.weight *= std::exp(-0.5 * std::min(far / square(tag_.start->position_sigma_m), 50.0));
    }
  }
  state_.first = false;
  state_.mixture.normalise();
  state_.mixture.order();
  state_.seeded_ns = state_.time_ns;
  state_.doubt = 0.0;
  state_.obstructed = 0.05;
}

void StandardTracker::seed_standing(const Component& base, double range_m, double weight) {
  const double wanted_m = std::sqrt(2.0 * seed_bend_m * range_m);
  const int seeds = std::clamp(static_cast<int>(std::numbers::pi * range_m / wanted_m), seeds_min, seeds_max);
  const double across_sigma_m = std::numbers::pi * range_m / seeds;
  for (int i = 0; i < seeds; ++i) {
    Component component = base;
    place(component, range_m, 2.0 * std::numbers::pi * i / seeds, across_sigma_m);
    component.filter.velocity_mps.setZero();
    for (Eigen::Index axis = 0; axis < 3; ++axis) forget(component.filter.P, in::velocity + axis, 0.1);
    component.filter.set_plain_covariance(component.filter.P);
    component.weight = weight / seeds;
    state_.mixture.add(component);
  }
}

void StandardTracker::seed_moving(const Component& base, double range_m, double weight) {
  const std::optional<RangeRate> known = state_.check.rate(state_.time_ns);
  const RangeRate rate =
      known ? RangeRate{known->rate_mps, std::hypot(known->sigma_mps, rate_sigma_min_mps)} : RangeRate{0.0, 100.0};
  const Vector2 course = (base.filter.q_body_to_site * Vector3::UnitX()).head<2>().normalized();
  const MovingBank bank = points_where_it_goes() ? MovingBank::along(course, tag_.speed_max_mps)
                                                 : MovingBank::free(std::min(tag_.speed_max_mps, free_speed_max_mps));
  Candidates candidates;
  const std::size_t count = bank.fill(candidates, rate);
  const auto first = candidates.begin();
  std::sort(first, first + static_cast<std::ptrdiff_t>(count), [](const Candidate& a, const Candidate& b) {
    return a.weight > b.weight || (a.weight == b.weight && a.bearing_rad < b.bearing_rad);
  });
  std::size_t taken = std::min(Mixture::capacity - state_.mixture.size(), count);
  while (taken > 1 && candidates[taken - 1].weight < seed_share_min * candidates[0].weight) --taken;
  double total = 0.0;
  for (std::size_t i = 0; i < taken; ++i) total += candidates[i].weight;
  for (std::size_t i = 0; i < taken; ++i) {
    const Candidate& candidate = candidates[i];
    Component component = base;
    place(component, range_m, candidate.bearing_rad, range_m * bank.bearing_sigma_rad());
    give_velocity(component.filter, candidate.velocity_mps, bank);
    // The range's rate ties bearing and speed together within the seed, too.
    const Vector2 away = direction(candidate.bearing_rad);
    FullLinearised radial;
    radial.innovation = rate.rate_mps - candidate.velocity_mps.dot(away);
    radial.row.segment<2>(in::velocity) = away;
    radial.row.segment<2>(in::position) = (candidate.velocity_mps - candidate.velocity_mps.dot(away) * away) / range_m;
    radial.variance = square(rate.sigma_mps);
    component.filter.invariant(radial);
    component.filter.update(radial);
    component.weight = weight * candidate.weight / total;
    state_.mixture.add(component);
  }
}

void StandardTracker::split_wide() {
  const Vector2 anchor = site_.anchors[state_.check.anchor()].position_m.head<2>();
  const std::size_t count = state_.mixture.size();
  for (std::size_t i = 0; i < count && state_.mixture.size() + 2 <= split_max; ++i) {
    const FullFilter& filter = state_.mixture[i].filter;
    const Vector2 away = filter.position_m.head<2>() - anchor;
    const double distance = std::max(away.norm(), range_min_m);
    const Vector2 across = Vector2(-away.y(), away.x()) / std::max(away.norm(), 1e-3);
    const double variance = across.dot(filter.P.topLeftCorner<2, 2>() * across);
    if (variance / (2.0 * distance) < split_bend_m || state_.mixture[i].weight < split_weight_min) continue;
    const std::array<Component, 3> parts = split(state_.mixture[i], across);
    state_.mixture[i] = parts[1];
    state_.mixture.add(parts[0]);
    state_.mixture.add(parts[2]);
  }
}

void StandardTracker::double_lead() {
  const Vector2 velocity = lead().velocity_mps.head<2>();
  if (!points_where_it_goes() || state_.at_rest || state_.mixture.full() || velocity.norm() < 0.3) return;
  const Component image = reflected(state_.mixture.lead(), site_.anchors[state_.check.anchor()].position_m, velocity);
  const Vector2 apart = image.filter.position_m.head<2>() - lead().position_m.head<2>();
  const double spread = lead().level_covariance().topLeftCorner<2, 2>().trace();
  if (apart.squaredNorm() < std::max(9.0 * spread, 4.0)) return;
  // Where something lives there already, it speaks for itself.
  for (const Component& component : state_.mixture) {
    const Vector2 near = image.filter.position_m.head<2>() - component.filter.position_m.head<2>();
    if (near.squaredNorm() < std::max(9.0 * spread, 4.0)) return;
  }
  Component twin = image;
  twin.weight = mirror_weight;
  for (Component& component : state_.mixture) component.weight *= 1.0 - mirror_weight;
  state_.mixture.add(twin);
}

}  // namespace kedge::fusion
