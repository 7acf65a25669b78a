#include "config/rules.h"

#include <algorithm>
#include <limits>
#include <string>
#include <unordered_map>

#include "core/assert.h"
#include "core/physics.h"
#include "pipeline/correction.h"
#include "proto/config.pb.h"

namespace kedge::config {
namespace {

constexpr double number_max = std::numeric_limits<std::uint32_t>::max();

constexpr Rule required(std::string_view field, std::string_view unit, double low, double high) {
  return {field, unit, low, high, Rule::Absence::refused, 0.0};
}
constexpr Rule required(std::string_view field, std::string_view unit, pipeline::Bounds bounds) {
  return required(field, unit, bounds.low, bounds.high);
}
constexpr Rule meant(std::string_view field, std::string_view unit, double low, double high) {
  return {field, unit, low, high, Rule::Absence::meant, 0.0};
}
constexpr Rule meant(std::string_view field, std::string_view unit, pipeline::Bounds bounds) {
  return meant(field, unit, bounds.low, bounds.high);
}
constexpr Rule filled(std::string_view field, double standard, std::string_view unit, double low, double high) {
  return {field, unit, low, high, Rule::Absence::filled, standard};
}

constexpr Rule table[] = {
    filled("Site.bearing_deg", 0, "deg", -360, 360),
    filled("Site.gravity_mps2", gravity_mps2_default, "m/s2", 9.7, 9.9),
    filled("Site.propagation_speed_mps", propagation_speed_mps_default, "m/s", 290e6, 299792458),
    filled("Site.declination_deg", 0, "deg", -180, 180),
    meant("Site.field_ut", "uT", 15, 75),
    meant("Site.dip_deg", "deg", -90, 90),
    filled("Site.ground_up_m", 0, "m", pipeline::up_bounds_m.low, pipeline::up_bounds_m.high),
    required("Box.east_min_m", "m", pipeline::level_bounds_m),
    required("Box.east_max_m", "m", pipeline::level_bounds_m),
    required("Box.north_min_m", "m", pipeline::level_bounds_m),
    required("Box.north_max_m", "m", pipeline::level_bounds_m),
    required("Place.east_m", "m", pipeline::level_bounds_m),
    required("Place.north_m", "m", pipeline::level_bounds_m),

    required("Anchor.anchor_id", "", 0, number_max),
    required("Anchor.east_m", "m", pipeline::level_bounds_m),
    required("Anchor.north_m", "m", pipeline::level_bounds_m),
    required("Anchor.up_m", "m", pipeline::up_bounds_m),
    filled("Anchor.range_sigma_m", 0.12, "m", 0.001, 10),
    filled("Anchor.range_bias_m", 0, "m", -100, 100),
    filled("Anchor.range_scale", 0, "", -0.5, 0.5),
    meant("Anchor.device_id", "", 1, number_max),

    required("Tag.device_id", "", 1, number_max),
    filled("Tag.antenna_height_m", 0.5, "m", -100, 1000),
    filled("Tag.height_sigma_m", 0.1, "m", 0.001, 1000),
    filled("Tag.range_lag_s", 0, "s", 0, 2),
    meant("Tag.battery_low_v", "V", 0, 1000),
    meant("Tag.speed_max_mps", "m/s", 0.01, 1000),
    required("Start.east_m", "m", pipeline::level_bounds_m),
    required("Start.north_m", "m", pipeline::level_bounds_m),
    required("Start.position_sigma_m", "m", pipeline::position_sigma_bounds_m),
    meant("Start.heading_deg", "deg", pipeline::heading_bounds_deg),
    meant("Start.heading_sigma_deg", "deg", pipeline::heading_sigma_bounds_deg),
    filled("Mounting.roll_deg", 0, "deg", -360, 360),
    filled("Mounting.pitch_deg", 0, "deg", -360, 360),
    filled("Mounting.yaw_deg", 0, "deg", -360, 360),
    filled("Mounting.antenna_forward_m", 0, "m", -100, 100),
    filled("Mounting.antenna_left_m", 0, "m", -100, 100),
    filled("Mounting.antenna_up_m", 0, "m", -100, 100),
    filled("Inertial.gyro_noise_degps_rthz", 0.007, "deg/s/sqrt(Hz)", 1e-6, 10),
    filled("Inertial.accel_noise_ug_rthz", 200, "ug/sqrt(Hz)", 0.1, 1e6),
    filled("Inertial.gyro_bias_degps", 0.5, "deg/s", 1e-6, 100),
    filled("Inertial.accel_bias_mps2", 0.05, "m/s2", 1e-6, 10),
    filled("Inertial.vibration_mps2", 0.3, "m/s2", 0, 100),
    filled("Inertial.gyro_full_scale_degps", 2000, "deg/s", 1, 100e3),
    filled("Inertial.accel_full_scale_g", 16, "g", 0.1, 10e3),
    meant("Magnetometer.hard_iron_ut", "uT", -10e3, 10e3),
    meant("Magnetometer.soft_iron", "", -100, 100),
    filled("Magnetometer.heading_sigma_deg", 2.5, "deg", 0.01, 180),

    required("Udp.port", "", 1, 65535),
    filled("Serial.baud", 115200, "baud", 1200, 4e6),
    filled("Feed.clients_max", 32, "", 1, 1000),
    filled("Feed.queue_messages_max", 2000, "", 10, 1e6),
    filled("Feed.queue_bytes_max", 1 << 20, "", 1 << 16, 1 << 30),
    filled("Capture.flush_s", 1, "s", 0, 60),

    filled("Limits.tick_hz", 10, "Hz", 0.1, 100),
    filled("Limits.settled_enter_m", 2, "m", 0.01, 1000),
    filled("Limits.settled_leave_m", 3, "m", 0.01, 1000),
    filled("Limits.lost_radius_m", 50, "m", 0.1, 100e3),
    filled("Limits.range_max_m", 300, "m", 1, 100e3),
    filled("Limits.delay_max_s", 1, "s", 0.01, 2),
    filled("Limits.range_stale_s", 2, "s", 0.05, 3600),
    filled("Limits.inertial_stale_s", 1, "s", 0.05, 3600),
    filled("Limits.anchor_silent_s", 5, "s", 0.05, 3600),
    filled("Limits.silent_s", 10, "s", 0.05, 3600),
    filled("Limits.rate_window_s", 5, "s", 0.1, 60),
    filled("Limits.missing_share_max", 0.3, "", 0, 1),
    filled("Limits.unknown_devices_max", 64, "", 0, 10e3),
    filled("Limits.health_period_s", 1, "s", 0.1, 60),
};

}  // namespace

std::span<const Rule> rules() { return table; }

const Rule& rule_of(const google::protobuf::FieldDescriptor& field) {
  static const auto by_name = [] {
    std::unordered_map<std::string_view, const Rule*> rules_by_name;
    for (const Rule& rule : table) rules_by_name.emplace(rule.field, &rule);
    return rules_by_name;
  }();
  const auto found = by_name.find(field.containing_type()->name() + "." + field.name());
  KEDGE_ASSERT(found != by_name.end());
  return *found->second;
}

}  // namespace kedge::config
