#include <algorithm>
#include <cmath>
#include <numbers>

#include "core/chi_square.h"
#include "fusion/obstruction.h"
#include "fusion/tracker.h"

namespace kedge::fusion {

namespace {

constexpr double range_sigma_min_m = 0.02;
constexpr TimeNs window_spacing_ns = 45 * ns_per_ms;
constexpr TimeNs window_solve_ns = 500 * ns_per_ms;
constexpr TimeNs window_long_ns = 6 * ns_per_s;
constexpr TimeNs window_short_ns = 3 * ns_per_s;
constexpr TimeNs window_first_ns = 1'500 * ns_per_ms;
constexpr double level_range_min_m = 0.5;
constexpr double smoothing_time_s = 5.0;

constexpr double mirror_unlikely = 0.01;
constexpr TimeNs mirror_patience_ns = ns_per_s;

constexpr TimeNs refused_max_ns = 4 * ns_per_s;
constexpr std::int32_t refused_max = 10;
constexpr std::int32_t speeds_refused_max = 3;

constexpr double check_chi_square_max = 2.5;

}  // namespace

Outcome Tracker::take(const RangeMeasurement& measurement) {
  if (measurement.anchor >= site_.anchors.size() || !std::isfinite(measurement.range_m) ||
      !std::isfinite(measurement.sigma_m) || measurement.range_m <= 0.0 || measurement.sigma_m < 0.0) {
    return {.code = Outcome::Code::implausible};
  }
  RangeMeasurement range = measurement;
  range.sigma_m = std::max(range.sigma_m, range_sigma_min_m);
  remember(range);
  Outcome outcome{.code = Outcome::Code::noted};
  if (located()) {
    outcome = weigh(range);
    decide_between_twins();
    recover();
  }
  state_.range_ns = state_.time_ns;
  solve_window();
  return outcome;
}

void Tracker::remember(const RangeMeasurement& range) {
  if (range.anchor != state_.window_anchor) {
    const bool unheard = state_.window.empty() || state_.time_ns - state_.window.back().time_ns > 2 * ns_per_s;
    if (!unheard) return;
    state_.window.clear();
    state_.ring_radius_m.reset();
    state_.window_anchor = range.anchor;
  }
  if (!state_.window.empty() && state_.time_ns - state_.window.back().time_ns < window_spacing_ns) return;
  const double antenna_up =
      state_.airborne && located() ? lead().position_m().z() + lever_in_site_m().z() : antenna_up_m();
  const double height = antenna_up - site_.anchors[range.anchor].position_m.z();
  const double straight = range.range_m - lead().x[at::range_bias];
  const double level_square = straight * straight - height * height;
  if (!(level_square > level_range_min_m * level_range_min_m)) return;
  RangePoint point;
  point.time_ns = state_.time_ns;
  point.range_m = std::sqrt(level_square);
  point.sigma_m = range.sigma_m * straight / point.range_m;
  point.path_s = state_.path_s;
  state_.window.push_back(point);
  const double smooth = state_.ring_radius_m ? 0.2 : 1.0;
  const double before = state_.ring_radius_m.value_or(0.0);
  state_.ring_radius_m = before + smooth * (point.range_m - before);
}

Outcome Tracker::weigh(const RangeMeasurement& range) {
  const double dt_s = seconds(state_.time_ns - state_.range_ns);
  const double obstructed = obstructed_after(state_.obstructed, dt_s);

  const Vector3& anchor = site_.anchors[range.anchor].position_m;
  std::array<Linearised, 2> linearised;
  std::array<double, 2> sigma{};
  std::array<double, 2> clear_share{};
  double total = 0.0;
  double obstructed_total = 0.0;
  for (std::size_t i = 0; i < alive(); ++i) {
    Hypothesis& hypothesis = state_.hypotheses[i];
    linearised[i] = hypothesis.filter.range(anchor, lever_in_site_m(), range.range_m, range.sigma_m);
    sigma[i] = std::sqrt(hypothesis.filter.innovation_variance(linearised[i]));
    const double clear = (1.0 - obstructed) * normal_density(linearised[i].innovation, sigma[i]);
    const double blocked = obstructed * excess_density(linearised[i].innovation, sigma[i]);
    clear_share[i] = clear / (clear + blocked + 1e-300);
    const double likelihood = clear + blocked + stray_density;
    hypothesis.weight *= likelihood;
    total += hypothesis.weight;
    obstructed_total += hypothesis.weight * (blocked + 0.5 * stray_density) / likelihood;
  }
  state_.obstructed = std::clamp(obstructed_total / total, 0.001, 0.999);
  for (std::size_t i = 0; i < alive(); ++i) state_.hypotheses[i].weight /= total;

  const double gate = std::sqrt(chi_square_999[0]);
  const auto passes = [&](std::size_t i) { return std::abs(linearised[i].innovation) <= gate * sigma[i]; };
  for (std::size_t i = 0; i < alive(); ++i) {
    if (passes(i)) state_.hypotheses[i].filter.update(linearised[i], clear_share[i]);
  }
  const bool used = passes(0);
  const double smooth = 1.0 - std::exp(-std::max(dt_s, 0.0) / smoothing_time_s);
  state_.range_excess_m += smooth * (std::clamp(linearised[0].innovation, -10.0, 10.0) - state_.range_excess_m);
  state_.range_gated_share += smooth * ((used ? 0.0 : 1.0) - state_.range_gated_share);
  state_.ranges_refused = used ? 0 : state_.ranges_refused + 1;
  if (used) state_.range_used_ns = state_.time_ns;
  return {.code = used ? Outcome::Code::used : Outcome::Code::gated,
          .innovation = linearised[0].innovation,
          .sigma = sigma[0],
          .gate = gate};
}

void Tracker::order_twins() {
  if (state_.hypotheses[1].weight > state_.hypotheses[0].weight) std::swap(state_.hypotheses[0], state_.hypotheses[1]);
}

void Tracker::drop_mirror() {
  state_.twins = false;
  state_.hypotheses[0].weight = 1.0;
  state_.phase = Phase::single;
}

void Tracker::decide_between_twins() {
  if (!state_.twins) return;
  order_twins();
  const Hypothesis& mirror = state_.hypotheses[1];
  const Vector3 apart = lead().position_m() - mirror.filter.position_m();
  const double spread = lead().P.diagonal().head<2>().sum();
  if (apart.head<2>().squaredNorm() < std::max(0.25 * spread, 0.04)) {
    drop_mirror();
    return;
  }
  if (mirror.weight >= mirror_unlikely) {
    state_.lopsided_since_ns = state_.time_ns;
  } else if (state_.time_ns - state_.lopsided_since_ns >= mirror_patience_ns) {
    drop_mirror();
  }
}

void Tracker::recover() {
  if (state_.at_rest) return;
  const bool refused = state_.ranges_refused >= refused_max && state_.time_ns - state_.range_used_ns > refused_max_ns;
  if (!refused && state_.speeds_refused < speeds_refused_max) return;
  state_.speeds_refused = 0;
  state_.ranges_refused = 0;
  state_.range_used_ns = state_.time_ns;
  if (state_.twins) drop_mirror();
  if (speed_aided()) {
    // Everything but the heading is in doubt: only the distance is known until the ranges, or an operator,
    // say more.
    state_.phase = Phase::ring;
    state_.check.reset();
    return;
  }
  for (Eigen::Index i = 0; i < 3; ++i) {
    lead().P(at::position + i, at::position + i) += 25.0;
    lead().P(at::velocity + i, at::velocity + i) += 1.0;
  }
}

void Tracker::solve_window() {
  if (state_.time_ns - state_.window_try_ns < window_solve_ns || state_.at_rest || state_.window.empty()) return;
  state_.window_try_ns = state_.time_ns;
  const std::size_t first = first_since(state_.window, state_.time_ns - window_long_ns);
  if (first >= state_.window.size()) return;
  const TimeNs begin_ns = state_.window[first].time_ns;
  const TimeNs window_ns = state_.window.back().time_ns - begin_ns;
  if (window_ns < window_first_ns || !state_.motion.steady(begin_ns)) return;
  CheckSpeed check;
  check.time_ns = state_.time_ns;
  check.window_ns = window_ns;
  const bool straight = state_.motion.straight(begin_ns) && points_where_it_goes();
  if (window_ns < window_short_ns) {
    // The cheap start: three ranges give a first speed before the least squares has enough of them.
    if (!straight) return;
    const std::size_t middle = (first + state_.window.size() - 1) / 2;
    const auto speed = three_range_speed({state_.window[first], state_.window[middle], state_.window.back()});
    if (!speed) return;
    check.speed_mps = speed->speed_mps;
    check.sigma_mps = speed->speed_sigma_mps;
  } else if (straight) {
    const auto speed = least_squares_speed(state_.window, first);
    if (!speed || speed->chi_square > check_chi_square_max) return;
    check.speed_mps = speed->speed_mps;
    check.sigma_mps = speed->speed_sigma_mps * std::sqrt(std::max(speed->chi_square, 1.0));
  } else {
    const auto speed = shaped_speed(state_.window, first);
    if (!speed || speed->best.chi_square > check_chi_square_max) return;
    check.speed_mps = speed->best.speed_mps;
    check.sigma_mps = std::sqrt(speed->best.covariance(2, 2) * std::max(speed->best.chi_square, 1.0));
  }
  // A constant range error left bends the circle: its share of the distance is one of the speed.
  const double bias_sigma = std::sqrt(lead().P(at::range_bias, at::range_bias));
  check.sigma_mps = std::hypot(check.sigma_mps, check.speed_mps * bias_sigma / state_.window.back().range_m);
  if (check.speed_mps > 2.0 * tag_.speed_max_mps || !(check.sigma_mps < 0.5)) return;
  state_.check = check;
  if (!speed_aided() || !points_where_it_goes()) return;
  if (located()) {
    use_speed(check.speed_mps, check.sigma_mps, window_ns);
  } else if (state_.phase == Phase::ring && window_ns >= window_short_ns) {
    seed_from_window();
  }
}

void Tracker::use_speed(double speed_mps, double sigma_mps, TimeNs window_ns) {
  // Its ranges were used already, as ranges: each is counted in one window only, and at half weight (eq. 33).
  if (state_.window.back().time_ns - state_.speed_fused_ns < window_ns) return;
  state_.speed_fused_ns = state_.window.back().time_ns;
  bool taken = false;
  for (std::size_t i = 0; i < alive(); ++i) {
    PositionFilter& filter = state_.hypotheses[i].filter;
    const Linearised speed = filter.speed(state_.attitude.heading_rad(), false, speed_mps,
                                          std::numbers::sqrt2 * std::hypot(sigma_mps, 0.05));
    const double variance = filter.innovation_variance(speed);
    if (speed.innovation * speed.innovation > chi_square_999[0] * variance) continue;
    filter.update(speed);
    taken = true;
  }
  state_.speeds_refused = taken ? 0 : state_.speeds_refused + 1;
}

Hypothesis Tracker::hypothesis_of(const ShapedFit& fit) const {
  Hypothesis hypothesis = state_.hypotheses[0];  // carries heading, accelerometer and range errors
  PositionFilter& filter = hypothesis.filter;
  const double error = filter.heading_error_rad();
  const Eigen::Rotation2Dd turn(error);
  const Vector2 from_anchor = turn * fit.position_m;
  const double heading = state_.attitude.heading_rad() + error;
  const Vector2 forward(std::cos(heading), std::sin(heading));
  const Vector2 velocity = fit.speed_mps * forward;
  const Vector3 lever = lever_in_site_m();
  const Vector2 position = site_.anchors[state_.window_anchor].position_m.head<2>() + from_anchor - lever.head<2>();
  for (Eigen::Index i = 0; i < 2; ++i) {
    filter.set(at::position + i, position[i], 0.0);
    filter.set(at::velocity + i, velocity[i], 0.0);
  }
  filter.set(at::position + 2, antenna_up_m() - lever.z(), tag_.height_sigma_m);
  filter.set(at::velocity + 2, 0.0, 0.05);
  // Neighbouring ranges err alike and speed is not quite constant: twice the variance (eq. 37).
  const double inflation = 2.0 * std::max(1.0, fit.chi_square);
  Eigen::Matrix<double, 4, 3> spread = Eigen::Matrix<double, 4, 3>::Zero();
  spread.block<2, 2>(0, 0) = turn.toRotationMatrix();
  spread.block<2, 1>(2, 2) = forward;
  const Eigen::Matrix4d covariance = inflation * spread * fit.covariance * spread.transpose();
  filter.P.block<2, 2>(at::position, at::position) = covariance.block<2, 2>(0, 0);
  filter.P.block<2, 2>(at::velocity, at::velocity) = covariance.block<2, 2>(2, 2) + 0.01 * Matrix2::Identity();
  filter.P.block<2, 2>(at::position, at::velocity) = covariance.block<2, 2>(0, 2);
  filter.P.block<2, 2>(at::velocity, at::position) = covariance.block<2, 2>(2, 0);
  // The whole picture turns with the heading and widens with the range bias.
  FilterMatrix common = FilterMatrix::Identity();
  common.block<2, 1>(at::position, at::heading) = Vector2(-from_anchor.y(), from_anchor.x());
  common.block<2, 1>(at::velocity, at::heading) = Vector2(-velocity.y(), velocity.x());
  common.block<2, 1>(at::position, at::range_bias) = -from_anchor.normalized();
  filter.P = (common * filter.P * common.transpose()).eval();
  return hypothesis;
}

void Tracker::seed_from_window() {
  if (!state_.attitude.aligned || lead().P(at::heading, at::heading) > std::pow(radians(20.0), 2)) return;
  const std::size_t first = first_since(state_.window, state_.time_ns - window_long_ns);
  const std::optional<ShapedSpeed> fit = shaped_speed(state_.window, first);
  if (!fit || fit->best.chi_square > check_chi_square_max) return;
  const double speed_sigma = std::sqrt(fit->best.covariance(2, 2) * std::max(1.0, fit->best.chi_square));
  if (fit->best.speed_mps < 0.2 || speed_sigma > 0.25 * fit->best.speed_mps) return;

  std::array<Hypothesis, 2> found{hypothesis_of(fit->best), Hypothesis{}};
  found[0].weight = 1.0;
  state_.twins = fit->mirror.has_value();
  if (fit->mirror) {
    found[1] = hypothesis_of(*fit->mirror);
    // Half the evidence: the window's errors are alike (eq. 38).
    const double less_likely = std::exp(-0.5 * (fit->mirror->cost - fit->best.cost));
    found[0].weight = 1.0 / (1.0 + less_likely);
    found[1].weight = less_likely / (1.0 + less_likely);
  }
  if (state_.first && tag_.start) {
    // A vague start still tells the sides apart, as long as the tag cannot have gone far.
    const double gone_m = tag_.speed_max_mps * seconds(state_.time_ns - state_.window[first].time_ns);
    const double variance = std::pow(tag_.start->position_sigma_m, 2) + gone_m * gone_m;
    double total = 0.0;
    for (Hypothesis& hypothesis : found) {
      const double far = (hypothesis.filter.position_m().head<2>() - tag_.start->position_m).squaredNorm();
      hypothesis.weight *= std::exp(-0.5 * far / variance);
      total += hypothesis.weight;
    }
    for (Hypothesis& hypothesis : found) hypothesis.weight /= total;
  }
  state_.hypotheses = found;
  state_.first = false;
  state_.phase = state_.twins ? Phase::twofold : Phase::single;
  if (state_.twins) order_twins();
  state_.lopsided_since_ns = state_.time_ns;
  state_.range_used_ns = state_.time_ns;
  state_.ranges_refused = 0;
  state_.speeds_refused = 0;
  state_.speed_fused_ns = state_.time_ns;
  state_.obstructed = obstructed_share;
}

}  // namespace kedge::fusion
