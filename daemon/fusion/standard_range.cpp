#include <algorithm>
#include <cmath>

#include "core/chi_square.h"
#include "fusion/obstruction.h"
#include "fusion/standard_tracker.h"

namespace kedge::fusion {

namespace {

constexpr double range_sigma_min_m = 0.02;
constexpr double smoothing_time_s = 5.0;
constexpr TimeNs thin_spacing_ns = 500 * ns_per_ms;
constexpr double thin_share = 1e-5;
constexpr TimeNs double_spacing_ns = 2 * ns_per_s;
constexpr TimeNs straight_ns = 5 * ns_per_s;
/// Lost: most ranges of the last seconds unexplained.
constexpr double doubt_max = 0.8;
/// How much of its evidence a range loses for each share of unexplained ones in the last seconds, and what is left.
constexpr double doubt_weight = 5.0;
constexpr double share_min = 0.1;
constexpr double doubt_sigmas = 3.5;
constexpr TimeNs doubt_time_ns = 3 * ns_per_s;
constexpr TimeNs seed_patience_ns = 15 * ns_per_s;
constexpr double reseed_weight = 0.5;

}  // namespace

Outcome StandardTracker::take(const RangeMeasurement& measurement) {
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
    look_after();
  } else if (state_.awake && (state_.attitude.aligned || state_.told_heading_rad)) {
    seed(1.0);
  }
  state_.range_ns = state_.time_ns;
  const double bias_sigma = located() ? std::sqrt(lead().P(in::range_bias, in::range_bias)) : model_.range_bias_m;
  state_.check.solve(state_.time_ns, state_.motion, bias_sigma, tag_.speed_max_mps, points_where_it_goes());
  return outcome;
}

void StandardTracker::remember(const RangeMeasurement& range) {
  const double antenna_up =
      state_.airborne && located() ? lead().antenna_m(tag_.antenna_in_body_m).z() : antenna_up_m();
  const double height = antenna_up - site_.anchors[range.anchor].position_m.z();
  const double bias = located() ? lead().bias(in::range_bias) : 0.0;
  state_.check.add(state_.time_ns, range, range.range_m - bias, height);
}

Outcome StandardTracker::weigh(const RangeMeasurement& range) {
  catch_up();
  const double dt_s = seconds(state_.time_ns - state_.range_ns);
  const double obstructed = obstructed_after(state_.obstructed, dt_s);
  const Vector3& anchor = site_.anchors[range.anchor].position_m;
  const double gate = std::sqrt(chi_square_999[0]);
  Mixture::LogLikelihoods likelihoods{};
  double total = 0.0;
  double obstructed_total = 0.0;
  Outcome outcome{.gate = gate};
  double lead_clear = 1.0;
  for (std::size_t i = 0; i < state_.mixture.size(); ++i) {
    Component& component = state_.mixture[i];
    const FullLinearised linearised =
        component.filter.range(anchor, tag_.antenna_in_body_m, range.range_m, range.sigma_m);
    const double sigma = std::sqrt(component.filter.innovation_variance(linearised));
    const double clear = (1.0 - obstructed) * normal_density(linearised.innovation, sigma);
    const double blocked = obstructed * excess_density(linearised.innovation, sigma);
    const double clear_share = clear / (clear + blocked + 1e-300);
    const double likelihood = clear + blocked + stray_density;
    likelihoods[i] = std::log(likelihood);
    total += component.weight * likelihood;
    obstructed_total += component.weight * (blocked + 0.5 * stray_density);
    const bool passes = std::abs(linearised.innovation) <= gate * sigma;
    if (i == 0) {
      outcome.code = passes ? Outcome::Code::used : Outcome::Code::gated;
      outcome.innovation = linearised.innovation;
      outcome.sigma = sigma;
      lead_clear = passes ? clear_share : 0.0;
    }
    if (passes) component.filter.update(linearised, clear_share);
  }
  if (total > 0.0) state_.obstructed = std::clamp(obstructed_total / total, 0.001, 0.999);
  // What an obstruction has bent takes a while to straighten: until then the hypotheses are not judged by it.
  state_.mixture.reweigh(likelihoods, std::max(1.0 - doubt_weight * state_.doubt, share_min));

  const double smooth = 1.0 - std::exp(-std::max(dt_s, 0.0) / smoothing_time_s);
  state_.range_excess_m += smooth * (std::clamp(outcome.innovation, -10.0, 10.0) - state_.range_excess_m);
  const double refused = outcome.code == Outcome::Code::used ? 0.0 : 1.0;
  state_.range_gated_share += smooth * (refused - state_.range_gated_share);
  if (!state_.at_rest) state_.doubt += smooth * (1.0 - lead_clear - state_.doubt);
  state_.mixture.order();
  return outcome;
}

void StandardTracker::look_after() {
  if (state_.time_ns - state_.thinned_ns >= thin_spacing_ns) {
    state_.thinned_ns = state_.time_ns;
    state_.mixture.thin(thin_share);
    split_wide();
    state_.mixture.order();
  }
  if (state_.time_ns - state_.doubled_ns >= double_spacing_ns && state_.motion.straight(state_.time_ns - straight_ns)) {
    state_.doubled_ns = state_.time_ns;
    double_lead();
  }
  if (!doubtful()) state_.sure_ns = state_.time_ns;
  if (state_.time_ns - state_.sure_ns > doubt_time_ns && state_.time_ns - state_.seeded_ns > seed_patience_ns) {
    seed(reseed_weight);
  }
}

bool StandardTracker::doubtful() const {
  if (state_.doubt > doubt_max) return true;
  // A field that is off by more than it ever is: the heading is.
  if (std::abs(lead().bias(in::field)) > doubt_sigmas * model_.field_sigma_rad) return true;
  const double speed = lead().velocity_mps.norm();
  const double sigma = std::sqrt(lead().level_covariance().bottomRightCorner<2, 2>().trace());
  if (speed > 1.2 * tag_.speed_max_mps + 2.0 * sigma) return true;
  const std::optional<WindowSpeed> check = state_.check.speed(state_.time_ns);
  return check && !state_.at_rest &&
         std::abs(check->speed_mps - speed) > doubt_sigmas * std::hypot(check->sigma_mps, sigma, 0.1);
}

}  // namespace kedge::fusion
