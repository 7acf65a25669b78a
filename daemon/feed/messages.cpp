#include "feed/messages.h"

#include <algorithm>
#include <cmath>
#include <optional>

#include "core/rotation.h"
#include "pipeline/standing.h"

namespace kedge::feed {
namespace {

using fusion::Estimate;
using fusion::Mode;
using fusion::Phase;
using pipeline::Concern;
using pipeline::Standing;

// Casts between the report's words and the proto's rest on both having the same numbers.
static_assert(static_cast<int>(Standing::silent) == v1::Standing::silent);
static_assert(static_cast<int>(Standing::loose) == v1::Standing::loose);
static_assert(static_cast<int>(Standing::lost) == v1::Standing::lost);
static_assert(static_cast<int>(Standing::lost) == v1::Standing::Value_MAX);
static_assert(static_cast<int>(Concern::range_stale) == v1::Concern::range_stale);
static_assert(static_cast<int>(Concern::link_down) == v1::Concern::link_down);
static_assert(static_cast<int>(pipeline::concern_count) == v1::Concern::Value_ARRAYSIZE);

v1::Standing::Value word(Standing standing) { return static_cast<v1::Standing::Value>(standing); }

double finite_or_zero(double value) { return std::isfinite(value) ? value : 0.0; }

std::optional<double> finite(std::optional<double> value) {
  return value && std::isfinite(*value) ? value : std::nullopt;
}

bool finite(const Mode& mode) {
  return mode.position_m.allFinite() && mode.position_covariance_m2.allFinite() && mode.velocity_mps.allFinite() &&
         mode.velocity_covariance_m2ps2.allFinite() && std::isfinite(mode.probability);
}

/// Whether the estimate holds a position that may be shown.
bool located(const pipeline::TrackReport& report) {
  const Phase phase = report.estimate.phase;
  return pipeline::has_position(report.standing) && (phase == Phase::twofold || phase == Phase::single) &&
         finite(report.estimate.lead);
}

/// Position, covariance and probability: what Position and its Mirror have in common.
template <class Out>
void fill(const Mode& mode, Out& out) {
  out.set_east_m(mode.position_m.x());
  out.set_north_m(mode.position_m.y());
  out.set_up_m(mode.position_m.z());
  for (int row = 0; row < 3; ++row) {
    for (int column = row; column < 3; ++column) out.add_covariance_m2(mode.position_covariance_m2(row, column));
  }
  out.set_probability(mode.probability);
}

void fill(const pipeline::TrackReport& report, const fusion::Site& site, v1::Position& out) {
  const Estimate& estimate = report.estimate;
  out.set_standing(word(report.standing));
  if (located(report)) {
    fill(estimate.lead, out);
    if (const auto radius_m = finite(report.radius_95_m)) out.set_radius_95_m(*radius_m);
    if (estimate.phase == Phase::twofold && finite(estimate.mirror)) fill(estimate.mirror, *out.mutable_mirror());
  } else if (report.standing == Standing::ring && estimate.ring_anchor < site.anchors.size()) {
    if (const auto radius_m = finite(estimate.ring_radius_m)) {
      out.set_ring_radius_m(*radius_m);
      out.set_ring_anchor(site.anchors[estimate.ring_anchor].name);
    }
  }
}

/// Standard deviation of the velocity along a level unit direction.
double sigma_along(const Matrix2& covariance, const Vector2& direction) {
  return std::sqrt(std::max(0.0, direction.dot(covariance * direction)));
}

void fill_motion(const Estimate& estimate, double site_bearing_rad, v1::Speed& out) {
  const Vector2 velocity_mps = estimate.lead.velocity_mps.head<2>();
  const Matrix2 covariance = estimate.lead.velocity_covariance_m2ps2.topLeftCorner<2, 2>();
  const double speed_mps = velocity_mps.norm();
  // At a standstill every direction is as good: the larger spread stands for all.
  const bool directed = speed_mps > 1e-6;
  const Vector2 along = directed ? Vector2(velocity_mps / speed_mps)
                                 : Vector2(covariance(0, 0) > covariance(1, 1) ? Vector2::UnitX() : Vector2::UnitY());
  const double speed_sigma_mps = sigma_along(covariance, along);
  out.set_speed_mps(speed_mps);
  out.set_speed_sigma_mps(speed_sigma_mps);
  out.set_climb_mps(estimate.lead.velocity_mps.z());
  out.set_climb_sigma_mps(std::sqrt(std::max(0.0, estimate.lead.velocity_covariance_m2ps2(2, 2))));
  if (!directed || estimate.at_rest || speed_mps < course_speed_sigmas_min * speed_sigma_mps) return;
  const double course_rad = std::atan2(velocity_mps.y(), velocity_mps.x());
  const double across_sigma_mps = sigma_along(covariance, Vector2(-along.y(), along.x()));
  out.set_course_deg(degrees(bearing_from_heading(course_rad, site_bearing_rad)));
  // A direction is never less known than not at all.
  out.set_course_sigma_deg(std::min(180.0, degrees(across_sigma_mps / speed_mps)));
}

void fill(const pipeline::TrackReport& report, double site_bearing_rad, v1::Speed& out) {
  if (located(report)) fill_motion(report.estimate, site_bearing_rad, out);
  const auto heading_rad = finite(report.estimate.heading_rad);
  if (report.standing >= Standing::ring && heading_rad && std::isfinite(report.estimate.heading_sigma_rad)) {
    out.set_heading_deg(degrees(bearing_from_heading(*heading_rad, site_bearing_rad)));
    out.set_heading_sigma_deg(std::min(180.0, degrees(report.estimate.heading_sigma_rad)));
  }
}

void fill(const pipeline::TagHealthReport& report, TimeNs utc_offset_ns, v1::TagHealth& out) {
  out.set_standing(word(report.standing));
  out.set_standing_since_ns(report.standing_since_ns);
  out.set_standing_since_utc_ns(add_saturating(report.standing_since_ns, utc_offset_ns));
  out.set_inertial_rate_hz(finite_or_zero(report.inertial_rate_hz));
  out.set_range_rate_hz(finite_or_zero(report.range_rate_hz));
  out.set_missing_share(finite_or_zero(report.missing_share));
  if (const auto age_s = finite(report.inertial_age_s)) out.set_inertial_age_s(*age_s);
  if (const auto age_s = finite(report.range_age_s)) out.set_range_age_s(*age_s);
  if (const auto battery_v = finite(report.battery_v)) out.set_battery_v(*battery_v);
  if (const auto temperature_degc = finite(report.temperature_degc)) out.set_temperature_degc(*temperature_degc);
  if (const auto skew_ppm = finite(report.clock_skew_ppm)) out.set_clock_skew_ppm(*skew_ppm);
  out.set_ranges_used(report.ranges_used);
  out.set_ranges_refused(report.ranges_refused);
  out.set_restarts(report.restarts);
}

}  // namespace

MessageStream::MessageStream(const pipeline::Settings& settings, MessageSink& sink)
    : settings_(settings), sink_(sink) {}

void MessageStream::utc_offset(TimeNs utc_minus_monotonic_ns) { utc_minus_monotonic_ns_ = utc_minus_monotonic_ns; }

void MessageStream::publish(const pipeline::TrackReport& report) {
  const std::string& tag = settings_.tags.at(report.tag).model.name;
  const auto begin = [&](auto& body) {
    body.set_tag(tag);
    body.set_time_ns(report.estimate.time_ns);
    body.set_utc_ns(utc_of(report.estimate.time_ns));
  };
  v1::Position& position = *message_.mutable_position();
  begin(position);
  fill(report, settings_.site, position);
  send();
  v1::Speed& speed = *message_.mutable_speed();
  begin(speed);
  fill(report, settings_.site.bearing_rad, speed);
  send();
}

void MessageStream::publish(const pipeline::TagHealthReport& report) {
  v1::Health& message = health(report.time_ns, report.concerns);
  message.set_tag(settings_.tags.at(report.tag).model.name);
  fill(report, utc_minus_monotonic_ns_, *message.mutable_tag_health());
  send();
}

void MessageStream::publish(const pipeline::AnchorHealthReport& report) {
  v1::Health& message = health(report.time_ns, report.concerns);
  message.set_anchor(settings_.site.anchors.at(report.anchor).name);
  v1::AnchorHealth& out = *message.mutable_anchor_health();
  out.set_range_rate_hz(finite_or_zero(report.range_rate_hz));
  out.set_tags_heard(report.tags_heard);
  if (const auto age_s = finite(report.age_s)) out.set_age_s(*age_s);
  send();
}

void MessageStream::publish(const pipeline::StationHealthReport& report) {
  v1::Health& message = health(report.time_ns, report.concerns);
  message.set_station(settings_.site.name);
  v1::StationHealth& out = *message.mutable_station_health();
  out.set_records(report.records);
  out.set_packets(report.packets);
  out.set_packets_refused(report.packets_refused);
  out.set_unknown_device_packets(report.unknown_device_packets);
  out.set_unknown_devices(report.unknown_devices);
  out.set_links_open(report.links_open);
  out.set_links(report.links);
  out.set_utc_synchronised(report.utc_synchronised);
  send();
}

void MessageStream::publish(const pipeline::PulseReport& report) {
  v1::Pulse& pulse = *message_.mutable_pulse();
  pulse.set_time_ns(report.time_ns);
  pulse.set_utc_ns(utc_of(report.time_ns));
  send();
}

void MessageStream::verdict(const pipeline::Verdict& /*verdict*/) {}

v1::Health& MessageStream::health(TimeNs time_ns, const pipeline::Concerns& concerns) {
  v1::Health& message = *message_.mutable_health();
  message.set_time_ns(time_ns);
  message.set_utc_ns(utc_of(time_ns));
  for (std::size_t i = 0; i < concerns.size(); ++i) {
    v1::Concern& out = *message.add_concerns();
    out.set_concern(static_cast<v1::Concern::Value>(concerns[i].concern));
    out.set_since_ns(concerns[i].since_ns);
    out.set_since_utc_ns(utc_of(concerns[i].since_ns));
    out.set_figure(finite_or_zero(concerns[i].figure));
  }
  return message;
}

void MessageStream::send() {
  message_.set_sequence(++sequence_);
  sink_.message(message_);
  message_.Clear();
}

}  // namespace kedge::feed
