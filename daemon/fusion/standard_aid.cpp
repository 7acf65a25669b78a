#include <algorithm>
#include <cmath>

#include "core/chi_square.h"
#include "fusion/pressure_height.h"
#include "fusion/standard_tracker.h"

namespace kedge::fusion {

namespace {

// The highest airfields and the deepest mines lie well inside.
constexpr double pressure_min_pa = 30e3;
constexpr double pressure_max_pa = 120e3;
constexpr double pressure_white_sigma_m = 0.25;
constexpr TimeNs pressure_spacing_ns = 100 * ns_per_ms;

constexpr TimeNs travel_interval_max_ns = 2 * ns_per_s;
constexpr double travel_sigma_mps = 0.05;
constexpr double travel_sigma_share = 0.03;
constexpr double travel_turn_sigma_rad = radians(1.0);

}  // namespace

Outcome StandardTracker::take(const PressureMeasurement& measurement) {
  const double pressure = measurement.pressure_pa;
  if (!(pressure >= pressure_min_pa && pressure <= pressure_max_pa)) return {.code = Outcome::Code::implausible};
  if (points_where_it_goes() || !located()) return {.code = Outcome::Code::noted};
  const double standard_m = standard_height_m(pressure);
  if (!state_.airborne || (state_.at_rest && !state_.moved)) {
    // On the ground: where the scale begins.
    const double zero_m = standard_m - antenna_up_m();
    state_.pressure_zero_m =
        state_.airborne ? state_.pressure_zero_m + 0.05 * (zero_m - state_.pressure_zero_m) : zero_m;
    state_.airborne = true;
    state_.pressure_ns = state_.time_ns;
    return {.code = Outcome::Code::noted};
  }
  if (state_.time_ns - state_.pressure_ns < pressure_spacing_ns) return {.code = Outcome::Code::noted};
  state_.pressure_ns = state_.time_ns;
  catch_up();
  Outcome outcome{.code = Outcome::Code::used, .gate = std::sqrt(chi_square_999[0])};
  const auto height_of = [&](const FullFilter& filter) {
    return filter.height(tag_.antenna_in_body_m, standard_m - state_.pressure_zero_m, pressure_white_sigma_m, true);
  };
  const FullLinearised height = height_of(lead());
  outcome.innovation = height.innovation;
  outcome.sigma = std::sqrt(lead().innovation_variance(height));
  update_all(height_of, true);
  return outcome;
}

Outcome StandardTracker::take(const TravelMeasurement& measurement) {
  const bool sane = measurement.interval_ns > 0 && std::isfinite(measurement.distance_m.value_or(0.0)) &&
                    std::isfinite(measurement.turn_rad.value_or(0.0));
  if (!sane) return {.code = Outcome::Code::implausible};
  const double interval_s = seconds(measurement.interval_ns);
  const double turned_rad = state_.attitude.turned_rad - state_.travel_turned_rad;
  const TimeNs since_ns = state_.time_ns - state_.travel_ns;
  state_.travel_ns = state_.time_ns;
  state_.travel_turned_rad = state_.attitude.turned_rad;
  if (!located() || measurement.interval_ns > travel_interval_max_ns) return {.code = Outcome::Code::noted};
  catch_up();
  // The wheels tell how far the gyroscope turned too much, if both mean the same interval.
  const bool same_interval = std::abs(since_ns - measurement.interval_ns) * 5 < measurement.interval_ns;
  if (measurement.turn_rad && same_interval && !state_.at_rest) {
    const double excess_radps = (turned_rad - *measurement.turn_rad) / interval_s;
    update_all(
        [&](const FullFilter& filter) {
          // The attitude filter's turn has its own bias taken out.
          const double left = filter.gyro_bias_radps().z() - state_.attitude.gyro_bias_radps.z();
          return FullFilter::direct(in::gyro + 2, excess_radps - left, travel_turn_sigma_rad / interval_s);
        },
        true);
  }
  if (!measurement.distance_m) return {.code = measurement.turn_rad ? Outcome::Code::used : Outcome::Code::noted};
  const double speed_mps = *measurement.distance_m / interval_s;
  const double sigma = std::hypot(travel_sigma_mps, travel_sigma_share * speed_mps);
  const auto speed_of = [&](const FullFilter& filter) {
    const Vector3 rate = state_.inertial.angular_rate_radps - filter.gyro_bias_radps();
    return filter.speed(0, tag_.antenna_in_body_m, rate, speed_mps, sigma);
  };
  const FullLinearised speed = speed_of(lead());
  Outcome outcome{.innovation = speed.innovation,
                  .sigma = std::sqrt(lead().innovation_variance(speed)),
                  .gate = std::sqrt(chi_square_999[0])};
  const bool passes = std::abs(outcome.innovation) <= outcome.gate * outcome.sigma;
  outcome.code = passes ? Outcome::Code::used : Outcome::Code::gated;
  if (passes || state_.mixture.size() > 1) update_all(speed_of, true);
  state_.mixture.order();
  return outcome;
}

Outcome StandardTracker::take(const CorrectionMeasurement& measurement) {
  const bool sane = (!measurement.position_m || measurement.position_m->allFinite()) &&
                    std::isfinite(measurement.up_m.value_or(0.0)) &&
                    std::isfinite(measurement.heading_rad.value_or(0.0)) && measurement.position_sigma_m > 0.0 &&
                    measurement.heading_sigma_rad > 0.0 && std::isfinite(measurement.position_sigma_m) &&
                    std::isfinite(measurement.heading_sigma_rad);
  if (!sane) return {.code = Outcome::Code::implausible};
  if (!state_.awake) {
    state_.word = measurement;  // holds as the start once the tag has levelled
    return {.code = Outcome::Code::noted};
  }
  if (measurement.heading_rad) correct_heading(*measurement.heading_rad, measurement.heading_sigma_rad);
  if (measurement.position_m) correct_position(measurement);
  const bool heading_only = measurement.heading_rad && !measurement.position_m;
  return {.code = heading_only || (measurement.position_m && located()) ? Outcome::Code::used : Outcome::Code::noted};
}

void StandardTracker::correct_position(const CorrectionMeasurement& measurement) {
  const Vector2& position = *measurement.position_m;
  const double sigma = measurement.position_sigma_m;
  if (!located()) {
    if (state_.attitude.aligned || state_.told_heading_rad) start_at(position, sigma);
    return;
  }
  const auto away = [&](const Component& component) {
    return (component.filter.antenna_m(tag_.antenna_in_body_m).head<2>() - position).squaredNorm();
  };
  const auto nearest = std::min_element(state_.mixture.begin(), state_.mixture.end(),
                                        [&](const Component& a, const Component& b) { return away(a) < away(b); });
  std::iter_swap(state_.mixture.begin(), nearest);
  state_.mixture.keep_lead();
  const Vector3 lever = lead().q_body_to_site * tag_.antenna_in_body_m;
  FullMatrix plain = lead().plain_covariance();
  lead().position_m.head<2>() = position - lever.head<2>();
  for (Eigen::Index i = 0; i < 2; ++i) forget(plain, in::position + i, sigma);
  if (measurement.up_m && state_.airborne) {
    lead().position_m.z() = *measurement.up_m - lever.z();
    forget(plain, in::position + 2, sigma);
  }
  lead().set_plain_covariance(plain);
  state_.doubt = 0.0;
}

void StandardTracker::correct_heading(double heading_rad, double sigma_rad) {
  if (!located()) {
    if (!state_.attitude.aligned) state_.attitude.set_heading(heading_rad);
    state_.told_heading_rad = heading_rad;
    state_.told_heading_sigma_rad = sigma_rad;
    return;
  }
  for (Component& component : state_.mixture) {
    FullFilter& filter = component.filter;
    const double turn = wrap_angle(heading_rad - filter.heading_rad());
    FullMatrix plain = filter.plain_covariance();
    const Quaternion about_up = level_attitude(turn);
    filter.q_body_to_site = (about_up * filter.q_body_to_site).normalized();
    // A tag that points where it goes turns its velocity along.
    if (points_where_it_goes()) filter.velocity_mps = about_up * filter.velocity_mps;
    forget(plain, in::heading, sigma_rad);
    filter.set_plain_covariance(plain);
  }
}

}  // namespace kedge::fusion
