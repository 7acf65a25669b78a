#include "pipeline/tag_watch.h"

#include <algorithm>
#include <cmath>

#include "pipeline/radius.h"
#include "pipeline/standing.h"

namespace kedge::pipeline {
namespace {

/// Ranges too long by this on average, or refused in this share, look like obstruction.
constexpr double excess_max_m = 0.4;
constexpr double gated_share_max = 0.3;
/// Field strength off by this share, or heading innovations this large on average, are no longer noise:
/// the magnetic model allows 2.5 degrees.
constexpr double field_error_share_max = 0.2;
constexpr double heading_innovation_max_rad = radians(12.0);
/// The independent speed differs from the filter's by this many joint sigmas, and by this at all.
constexpr double speed_sigmas_max = 4.0;
constexpr double speed_difference_min_mps = 0.3;
/// A sample this close to the end of scale is called saturated.
constexpr double full_scale_share = 0.98;
/// Conditions that flicker by nature are believed only after this long.
constexpr Patience slow = {ns_per_s, 3 * ns_per_s};
constexpr Patience prompt = {0, 2 * ns_per_s};
/// Every device's clock needs a few seconds of packets; only one that takes longer is a concern.
constexpr TimeNs clock_settling_ns = 12 * ns_per_s;

bool fresh(const std::optional<TimeNs>& at_ns, TimeNs now_ns, TimeNs age_max_ns) {
  return at_ns && now_ns - *at_ns <= age_max_ns;
}

std::optional<double> age_s(const std::optional<TimeNs>& at_ns, TimeNs now_ns) {
  if (!at_ns) return std::nullopt;
  return seconds(std::max<TimeNs>(now_ns - *at_ns, 0));
}

/// How far `position` lies outside the box, metres; 0 inside.
double metres_outside(const Vector3& position_m, const fusion::Box& box) {
  const Vector2 level = position_m.head<2>();
  return (level - level.cwiseMax(box.low_m).cwiseMin(box.high_m)).norm();
}

}  // namespace

void TagWatch::heard_inertial(const wire::InertialBatch& batch, TimeNs arrival_ns) {
  heard_ns_ = inertial_ns_ = arrival_ns;
  inertial_rate_.add(arrival_ns, limits_.rate_window_ns, batch.count);
  const fusion::InertialModel& model = tag_.model.inertial;
  const double gyro_end_radps = full_scale_share * model.gyro_full_scale_radps;
  const double accel_end_mps2 = full_scale_share * model.accel_full_scale_mps2;
  for (std::uint32_t i = 0; i < batch.count; ++i) {
    const wire::InertialSample& sample = batch.samples[i];
    if (sample.angular_rate_radps.cwiseAbs().maxCoeff() >= gyro_end_radps ||
        sample.specific_force_mps2.cwiseAbs().maxCoeff() >= accel_end_mps2) {
      saturated_.add(arrival_ns, limits_.rate_window_ns);
    }
  }
  if (batch.battery_v) battery_v_ = batch.battery_v;
  if (batch.temperature_degc) temperature_degc_ = batch.temperature_degc;
}

void TagWatch::heard_range(TimeNs arrival_ns) {
  heard_ns_ = range_ns_ = arrival_ns;
  range_rate_.add(arrival_ns, limits_.rate_window_ns);
}

void TagWatch::range_outcome(bool used, TimeNs arrival_ns) {
  ++(used ? ranges_used_ : ranges_refused_);
  if (used && (!range_used_ns_ || arrival_ns > *range_used_ns_)) range_used_ns_ = arrival_ns;
}

bool TagWatch::hears_inertial(TimeNs now_ns) const { return fresh(inertial_ns_, now_ns, limits_.silent_ns); }

bool TagWatch::update(const fusion::Estimate& estimate, const DeviceFigures& device, bool anchors_silent,
                      TimeNs now_ns) {
  const Standing before = standing_;
  update_standing(estimate, now_ns);
  note_input(device, anchors_silent, now_ns);
  note_estimate(estimate, now_ns);
  return concerns_.take_changed() || standing_ != before;
}

void TagWatch::update_standing(const fusion::Estimate& estimate, TimeNs now_ns) {
  const bool located = estimate.phase == fusion::Phase::twofold || estimate.phase == fusion::Phase::single;
  radius_95_m_ = located ? std::optional(radius_95(estimate)) : std::nullopt;
  const Footing footing = {fresh(heard_ns_, now_ns, limits_.silent_ns), estimate.phase, radius_95_m_,
                           fresh(range_used_ns_, now_ns, limits_.range_stale_ns)};
  const Standing next = standing_after(standing_, footing, limits_);
  if (next == standing_) return;
  if (standing_ == Standing::silent) {
    woken_ns_ = now_ns;
    clock_was_steady_ = false;
  }
  standing_ = next;
  standing_since_ns_ = now_ns;
}

void TagWatch::note_input(const DeviceFigures& device, bool anchors_silent, TimeNs now_ns) {
  const bool heard = standing_ != Standing::silent;
  // What never came is as old as the tag's first sign of life.
  const auto stale = [&](Concern concern, const std::optional<TimeNs>& at_ns, TimeNs limit_ns, bool excused) {
    const TimeNs age_ns = now_ns - std::max(at_ns.value_or(woken_ns_), woken_ns_);
    concerns_.note(concern, heard && !excused && age_ns > limit_ns, seconds(age_ns), now_ns);
  };
  stale(Concern::range_stale, range_ns_, limits_.range_stale_ns, anchors_silent);
  stale(Concern::inertial_stale, inertial_ns_, limits_.inertial_stale_ns, false);
  concerns_.note(Concern::packets_missing, heard && device.missing_share > limits_.missing_share_max,
                 device.missing_share, now_ns, slow);
  clock_was_steady_ |= device.clock_steady;
  concerns_.note(Concern::clock_unsteady, heard && !device.clock_steady, 1e3 * device.clock_sigma_s, now_ns,
                 clock_was_steady_ ? slow : Patience{clock_settling_ns, slow.clear_ns});
  const double saturated = saturated_.total(now_ns, limits_.rate_window_ns);
  const double samples = inertial_rate_.total(now_ns, limits_.rate_window_ns);
  concerns_.note(Concern::sensor_saturated, saturated > 0.0, samples > 0.0 ? saturated / samples : 1.0, now_ns, prompt);
  concerns_.note(Concern::battery_low, heard && tag_.battery_low_v && battery_v_ && *battery_v_ < *tag_.battery_low_v,
                 battery_v_.value_or(0.0), now_ns, slow);
  concerns_.note(Concern::uncalibrated, heard && tag_.model.magnetometer && !tag_.magnetometer_calibrated, 0.0, now_ns);
}

void TagWatch::note_estimate(const fusion::Estimate& estimate, TimeNs now_ns) {
  const bool placed = has_position(standing_);
  concerns_.note(Concern::range_blocked,
                 placed && (estimate.range_excess_m > excess_max_m ||
                            (estimate.range_gated_share > gated_share_max && estimate.range_excess_m > 0.0)),
                 estimate.range_excess_m, now_ns, slow);
  const bool waking = estimate.phase == fusion::Phase::waking;
  const bool odd_field = estimate.field_error_share > field_error_share_max;
  const bool odd_heading = std::abs(estimate.heading_innovation_rad) > heading_innovation_max_rad;
  concerns_.note(Concern::heading_disturbed, !waking && (odd_field || odd_heading),
                 std::abs(degrees(estimate.heading_innovation_rad)), now_ns, slow);

  const double radius_m = radius_95_m_.value_or(0.0);
  concerns_.note(Concern::too_uncertain, placed && radius_m > limits_.settled_leave_m, radius_m, now_ns, prompt);
  const double outside_m = placed && site_.extent ? metres_outside(estimate.lead.position_m, *site_.extent) : 0.0;
  concerns_.note(Concern::outside_site, outside_m > std::max(radius_m, 0.5), outside_m, now_ns, slow);

  bool disagrees = false;
  double difference_mps = 0.0;
  if (estimate.phase == fusion::Phase::single && estimate.check_speed_mps) {
    const Matrix3& covariance = estimate.lead.velocity_covariance_m2ps2;
    const double variance =
        0.5 * (covariance(0, 0) + covariance(1, 1)) + estimate.check_speed_sigma_mps * estimate.check_speed_sigma_mps;
    difference_mps = *estimate.check_speed_mps - estimate.lead.velocity_mps.head<2>().norm();
    disagrees = std::abs(difference_mps) > std::max(speed_difference_min_mps, speed_sigmas_max * std::sqrt(variance));
  }
  concerns_.note(Concern::speed_disagrees, disagrees, difference_mps, now_ns, slow);
}

TagHealthReport TagWatch::report(std::uint32_t tag, const DeviceFigures& device, std::uint32_t restarts,
                                 TimeNs now_ns) {
  TagHealthReport report;
  report.tag = tag;
  report.time_ns = now_ns;
  report.standing = standing_;
  report.standing_since_ns = standing_since_ns_;
  report.concerns = concerns_.list();
  report.inertial_rate_hz = inertial_rate_.rate_hz(now_ns, limits_.rate_window_ns);
  report.range_rate_hz = range_rate_.rate_hz(now_ns, limits_.rate_window_ns);
  report.missing_share = device.missing_share;
  report.inertial_age_s = age_s(inertial_ns_, now_ns);
  report.range_age_s = age_s(range_ns_, now_ns);
  report.battery_v = battery_v_;
  report.temperature_degc = temperature_degc_;
  report.clock_skew_ppm = device.clock_skew_ppm;
  report.ranges_used = ranges_used_;
  report.ranges_refused = ranges_refused_;
  report.restarts = restarts;
  return report;
}

}  // namespace kedge::pipeline
