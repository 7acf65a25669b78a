#include "config/settings.h"

#include <google/protobuf/descriptor.h>

#include <utility>

#include "config/rules.h"
#include "core/rotation.h"

namespace kedge::config {
namespace {

namespace pb = google::protobuf;
using pb::FieldDescriptor;

constexpr double standard_gravity_mps2 = 9.80665;  // what "g" means in data sheets (ISO 80000-3)

/// Fills in the absent numbers of one message that have a default; not those of messages within it.
void fill_numbers(pb::Message& message) {
  const pb::Descriptor& descriptor = *message.GetDescriptor();
  const pb::Reflection& reflection = *message.GetReflection();
  for (int i = 0; i < descriptor.field_count(); ++i) {
    const FieldDescriptor* field = descriptor.field(i);
    const bool real = field->cpp_type() == FieldDescriptor::CPPTYPE_DOUBLE;
    if (!real && field->cpp_type() != FieldDescriptor::CPPTYPE_UINT32) continue;
    if (field->is_repeated() || reflection.HasField(message, field)) continue;
    const Rule& rule = rule_of(*field);
    if (rule.absence != Rule::Absence::filled) continue;
    if (real) {
      reflection.SetDouble(&message, field, rule.standard);
    } else {
      reflection.SetUInt32(&message, field, static_cast<std::uint32_t>(rule.standard));
    }
  }
}

void fill(v1::Tag& tag, v1::Method::Value method) {
  fill_numbers(tag);
  if (!tag.has_profile()) tag.set_profile(v1::Profile::wheeled);
  if (tag.method() == v1::Method::standard) tag.set_method(method);
  if (!tag.has_speed_max_mps()) {
    const bool ground = tag.profile() == v1::Profile::wheeled || tag.profile() == v1::Profile::walker;
    tag.set_speed_max_mps(ground ? ground_speed_max_mps : free_speed_max_mps);
  }
  fill_numbers(*tag.mutable_mounting());
  fill_numbers(*tag.mutable_inertial());
  fill_numbers(*tag.mutable_magnetometer());
  if (!tag.magnetometer().has_present()) tag.mutable_magnetometer()->set_present(true);
}

fusion::Anchor anchor_from(const v1::Anchor& anchor) {
  return {anchor.name(),          anchor.anchor_id(),    {anchor.east_m(), anchor.north_m(), anchor.up_m()},
          anchor.range_sigma_m(), anchor.range_bias_m(), anchor.range_scale()};
}

fusion::Site site_from(const v1::Configuration& c) {
  const v1::Site& site = c.site();
  fusion::Site out;
  out.name = site.name();
  for (const v1::Anchor& anchor : c.anchors()) out.anchors.push_back(anchor_from(anchor));
  out.gravity_mps2 = site.gravity_mps2();
  out.propagation_speed_mps = site.propagation_speed_mps();
  out.bearing_rad = radians(site.bearing_deg());
  // Declination is the bearing of magnetic north.
  out.magnetic_north_heading_rad = heading_from_bearing(radians(site.declination_deg()), out.bearing_rad);
  if (site.has_field_ut()) out.field_ut = site.field_ut();
  if (site.has_dip_deg()) out.dip_rad = radians(site.dip_deg());
  out.ground_up_m = site.ground_up_m();
  if (site.has_extent()) {
    const v1::Box& box = site.extent();
    out.extent = fusion::Box{{box.east_min_m(), box.north_min_m()}, {box.east_max_m(), box.north_max_m()}};
  }
  return out;
}

fusion::Profile profile_from(v1::Profile::Value profile) {
  switch (profile) {
    case v1::Profile::walker:
      return fusion::Profile::walker;
    case v1::Profile::flyer:
      return fusion::Profile::flyer;
    case v1::Profile::free:
      return fusion::Profile::free;
    default:
      return fusion::Profile::wheeled;
  }
}

fusion::Start start_from(const v1::Start& start, double site_bearing_rad) {
  fusion::Start out;
  out.position_m = {start.east_m(), start.north_m()};
  out.position_sigma_m = start.position_sigma_m();
  if (start.has_heading_deg()) {
    out.heading_rad = heading_from_bearing(radians(start.heading_deg()), site_bearing_rad);
    out.heading_sigma_rad = radians(start.heading_sigma_deg());
  }
  return out;
}

fusion::InertialModel inertial_from(const v1::Inertial& inertial) {
  return {radians(inertial.gyro_noise_degps_rthz()),
          inertial.accel_noise_ug_rthz() * 1e-6 * standard_gravity_mps2,
          radians(inertial.gyro_bias_degps()),
          inertial.accel_bias_mps2(),
          inertial.vibration_mps2(),
          radians(inertial.gyro_full_scale_degps()),
          inertial.accel_full_scale_g() * standard_gravity_mps2};
}

fusion::Method method_from(v1::Method::Value method) {
  switch (method) {
    case v1::Method::speed_aided:
      return fusion::Method::speed_aided;
    case v1::Method::plain:
      return fusion::Method::plain;
    default:
      return fusion::Method::mixture;
  }
}

pipeline::TagSettings tag_from(const v1::Tag& tag, double site_bearing_rad) {
  pipeline::TagSettings out;
  out.model.name = tag.name();
  out.model.profile = profile_from(tag.profile());
  out.model.method = method_from(tag.method());
  out.model.antenna_height_m = tag.antenna_height_m();
  out.model.height_sigma_m = tag.height_sigma_m();
  out.model.speed_max_mps = tag.speed_max_mps();
  if (tag.has_start()) out.model.start = start_from(tag.start(), site_bearing_rad);
  const v1::Mounting& mounting = tag.mounting();
  out.model.antenna_in_body_m = {mounting.antenna_forward_m(), mounting.antenna_left_m(), mounting.antenna_up_m()};
  out.model.inertial = inertial_from(tag.inertial());
  const v1::Magnetometer& magnetometer = tag.magnetometer();
  out.model.magnetometer = magnetometer.present();
  out.model.magnetic_heading_sigma_rad = radians(magnetometer.heading_sigma_deg());
  out.device_id = tag.device_id();
  out.R_sensor_to_body =
      from_roll_pitch_yaw(radians(mounting.roll_deg()), radians(mounting.pitch_deg()), radians(mounting.yaw_deg()))
          .toRotationMatrix();
  const auto& hard = magnetometer.hard_iron_ut();
  if (!hard.empty()) out.hard_iron_ut = {hard[0], hard[1], hard[2]};
  const auto& soft = magnetometer.soft_iron();
  if (!soft.empty()) out.soft_iron << soft[0], soft[1], soft[2], soft[3], soft[4], soft[5], soft[6], soft[7], soft[8];
  out.magnetometer_calibrated = !hard.empty() || !magnetometer.present();
  out.range_lag_ns = from_seconds(tag.range_lag_s());
  if (tag.has_battery_low_v()) out.battery_low_v = tag.battery_low_v();
  return out;
}

pipeline::Limits limits_from(const v1::Limits& limits) {
  pipeline::Limits out;
  out.settled_enter_m = limits.settled_enter_m();
  out.settled_leave_m = limits.settled_leave_m();
  out.lost_radius_m = limits.lost_radius_m();
  out.range_max_m = limits.range_max_m();
  out.tick_ns = from_seconds(1.0 / limits.tick_hz());
  out.delay_max_ns = from_seconds(limits.delay_max_s());
  out.range_stale_ns = from_seconds(limits.range_stale_s());
  out.inertial_stale_ns = from_seconds(limits.inertial_stale_s());
  out.anchor_silent_ns = from_seconds(limits.anchor_silent_s());
  out.silent_ns = from_seconds(limits.silent_s());
  out.rate_window_ns = from_seconds(limits.rate_window_s());
  out.health_period_ns = from_seconds(limits.health_period_s());
  out.missing_share_max = limits.missing_share_max();
  out.unknown_devices_max = limits.unknown_devices_max();
  return out;
}

}  // namespace

v1::Configuration with_defaults(v1::Configuration c) {
  if (!c.has_method()) c.set_method(v1::Method::standard);
  fill_numbers(*c.mutable_site());
  for (v1::Anchor& anchor : *c.mutable_anchors()) fill_numbers(anchor);
  for (v1::Tag& tag : *c.mutable_tags()) fill(tag, c.method());
  for (v1::Link& link : *c.mutable_links()) {
    if (link.has_udp() && !link.udp().has_address()) link.mutable_udp()->set_address("127.0.0.1");
    if (link.has_serial()) fill_numbers(*link.mutable_serial());
  }
  fill_numbers(*c.mutable_feed());
  if (!c.feed().has_allow_remote()) c.mutable_feed()->set_allow_remote(false);
  fill_numbers(*c.mutable_capture());
  fill_numbers(*c.mutable_limits());
  return c;
}

pipeline::Settings settings_from(const v1::Configuration& configuration) {
  const v1::Configuration c = with_defaults(configuration);
  pipeline::Settings settings;
  settings.site = site_from(c);
  for (const v1::Tag& tag : c.tags()) settings.tags.push_back(tag_from(tag, settings.site.bearing_rad));
  for (const v1::Anchor& anchor : c.anchors()) {
    if (anchor.has_device_id()) settings.anchor_devices.push_back(anchor.device_id());
  }
  for (const v1::Link& link : c.links()) {
    settings.links.push_back({link.name(), link.has_serial() ? pipeline::LinkKind::serial : pipeline::LinkKind::udp});
  }
  settings.limits = limits_from(c.limits());
  return settings;
}

}  // namespace kedge::config
