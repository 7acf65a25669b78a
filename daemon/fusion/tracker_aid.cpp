#include <algorithm>
#include <cmath>

#include "core/chi_square.h"
#include "fusion/pressure_height.h"
#include "fusion/tracker.h"

namespace kedge::fusion {

namespace {

// The highest airfields and the deepest mines lie well inside.
constexpr double pressure_min_pa = 30e3;
constexpr double pressure_max_pa = 120e3;
constexpr double pressure_height_sigma_m = 0.4;  // weather and draught included
constexpr TimeNs pressure_spacing_ns = 500 * ns_per_ms;

constexpr TimeNs travel_interval_max_ns = 2 * ns_per_s;
constexpr double travel_sigma_mps = 0.05;
constexpr double travel_sigma_share = 0.03;
constexpr double travel_turn_sigma_rad = radians(1.0);

}  // namespace

Outcome Tracker::take(const PressureMeasurement& measurement) {
  const double pressure = measurement.pressure_pa;
  if (!(pressure >= pressure_min_pa && pressure <= pressure_max_pa)) return {.code = Outcome::Code::implausible};
  if (points_where_it_goes() || !located()) return {.code = Outcome::Code::noted};
  const double standard_m = standard_height_m(pressure);
  const double lever_up_m = lever_in_site_m().z();
  if (!state_.airborne || (state_.at_rest && !state_.moved)) {
    const double zero_m = standard_m - antenna_up_m();
    state_.pressure_zero_m =
        state_.airborne ? state_.pressure_zero_m + 0.05 * (zero_m - state_.pressure_zero_m) : zero_m;
    state_.airborne = true;
    state_.pressure_ns = state_.time_ns;
    return {.code = Outcome::Code::noted};
  }
  if (state_.time_ns - state_.pressure_ns < pressure_spacing_ns) return {.code = Outcome::Code::noted};
  state_.pressure_ns = state_.time_ns;
  Outcome outcome{.code = Outcome::Code::used, .gate = std::sqrt(chi_square_999[0])};
  for (std::size_t i = alive(); i-- > 0;) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    const Linearised height =
        filter.direct(at::position + 2, standard_m - state_.pressure_zero_m - lever_up_m, pressure_height_sigma_m);
    outcome.innovation = height.innovation;
    outcome.sigma = std::sqrt(filter.innovation_variance(height));
    filter.update(height);
  }
  return outcome;
}

Outcome Tracker::take(const TravelMeasurement& measurement) {
  const bool sane = measurement.interval_ns > 0 && std::isfinite(measurement.distance_m.value_or(0.0)) &&
                    std::isfinite(measurement.turn_rad.value_or(0.0));
  if (!sane) return {.code = Outcome::Code::implausible};
  const double interval_s = seconds(measurement.interval_ns);
  const double turned_rad = state_.attitude.turned_rad - state_.travel_turned_rad;
  const TimeNs since_ns = state_.time_ns - state_.travel_ns;
  state_.travel_ns = state_.time_ns;
  state_.travel_turned_rad = state_.attitude.turned_rad;
  if (!located() || !speed_aided() || measurement.interval_ns > travel_interval_max_ns) {
    return {.code = Outcome::Code::noted};
  }
  // The wheels tell how far the gyroscope turned too much, if both mean the same interval.
  const bool same_interval = std::abs(since_ns - measurement.interval_ns) * 5 < measurement.interval_ns;
  if (measurement.turn_rad && same_interval && !state_.at_rest) {
    const double bias_radps = (turned_rad - *measurement.turn_rad) / interval_s;
    for (std::size_t i = 0; i < alive(); ++i) {
      PositionFilter& filter = state_.hypotheses[i].filter;
      filter.update(filter.direct(at::yaw_rate, bias_radps, travel_turn_sigma_rad / interval_s));
    }
  }
  if (!measurement.distance_m) return {.code = measurement.turn_rad ? Outcome::Code::used : Outcome::Code::noted};
  const double speed_mps = *measurement.distance_m / interval_s;
  Outcome outcome{.gate = std::sqrt(chi_square_999[0])};
  for (std::size_t i = alive(); i-- > 0;) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    const double sigma = std::hypot(travel_sigma_mps, travel_sigma_share * speed_mps);
    const Linearised speed = filter.speed(state_.attitude.heading_rad(), false, speed_mps, sigma);
    outcome.innovation = speed.innovation;
    outcome.sigma = std::sqrt(filter.innovation_variance(speed));
    const bool passes = std::abs(outcome.innovation) <= outcome.gate * outcome.sigma;
    outcome.code = passes ? Outcome::Code::used : Outcome::Code::gated;
    if (passes) filter.update(speed);
  }
  return outcome;
}

Outcome Tracker::take(const CorrectionMeasurement& measurement) {
  const bool sane = (!measurement.position_m || measurement.position_m->allFinite()) &&
                    std::isfinite(measurement.up_m.value_or(0.0)) &&
                    std::isfinite(measurement.heading_rad.value_or(0.0)) && measurement.position_sigma_m > 0.0 &&
                    measurement.heading_sigma_rad > 0.0 && std::isfinite(measurement.position_sigma_m) &&
                    std::isfinite(measurement.heading_sigma_rad);
  if (!sane) return {.code = Outcome::Code::implausible};
  if (state_.phase == Phase::waking) {
    state_.word = measurement;  // holds as the start once the tag has levelled
    return {.code = Outcome::Code::noted};
  }
  if (measurement.heading_rad) correct_heading(*measurement.heading_rad, measurement.heading_sigma_rad);
  if (measurement.position_m) correct_position(measurement);
  const bool heading_only = measurement.heading_rad && !measurement.position_m;
  const bool used = heading_only || (measurement.position_m && state_.attitude.aligned);
  return {.code = used ? Outcome::Code::used : Outcome::Code::noted};
}

void Tracker::correct_position(const CorrectionMeasurement& measurement) {
  const Vector2& position = *measurement.position_m;
  const double sigma = measurement.position_sigma_m;
  if (!located()) {
    if (state_.attitude.aligned) start_at(position, sigma);
    return;
  }
  const auto away = [&](const Hypothesis& hypothesis) {
    return (mode_of(hypothesis).position_m.head<2>() - position).squaredNorm();
  };
  if (state_.twins && away(state_.hypotheses[1]) < away(state_.hypotheses[0])) {
    std::swap(state_.hypotheses[0], state_.hypotheses[1]);
  }
  drop_mirror();
  const Vector3 lever = lever_in_site_m();
  for (Eigen::Index i = 0; i < 2; ++i) lead().set(at::position + i, position[i] - lever[i], sigma);
  if (measurement.up_m && state_.airborne) lead().set(at::position + 2, *measurement.up_m - lever.z(), sigma);
  state_.range_used_ns = state_.time_ns;
  state_.ranges_refused = 0;
  state_.speeds_refused = 0;
}

void Tracker::correct_heading(double heading_rad, double sigma_rad) {
  AttitudeFilter& attitude = state_.attitude;
  if (state_.phase != Phase::waking && located()) {
    // A tag that points where it goes turns its velocity along.
    const double turn = heading_rad - attitude.heading_rad() - lead().heading_error_rad();
    for (std::size_t i = 0; i < alive(); ++i) {
      PositionFilter& filter = state_.hypotheses[i].filter;
      const Vector2 velocity = Eigen::Rotation2Dd(turn) * filter.velocity_mps().head<2>();
      if (points_where_it_goes()) filter.x.segment<2>(at::velocity) = velocity;
      filter.set(at::heading, wrap_angle(heading_rad - attitude.heading_rad()), sigma_rad);
    }
    return;
  }
  PositionFilter& filter = lead();
  if (attitude.aligned) {
    filter.update(filter.direct(at::heading, wrap_angle(heading_rad - attitude.heading_rad()), sigma_rad));
    return;
  }
  attitude.set_heading(heading_rad);
  filter.set(at::heading, 0.0, sigma_rad);
}

}  // namespace kedge::fusion
