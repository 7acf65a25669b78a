// Everything the engine is told at its start, in plain SI form. config/settings.h makes it from the
// configuration; nothing in the pure rooms reads the configuration itself.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "core/record.h"
#include "core/rotation.h"
#include "core/time.h"
#include "fusion/site.h"

namespace kedge::pipeline {

enum class LinkKind : std::uint8_t { udp, serial };

struct LinkSettings {
  std::string name;
  LinkKind kind = LinkKind::udp;
};

struct TagSettings {
  fusion::Tag model;
  std::uint32_t device_id = 0;
  Matrix3 R_sensor_to_body = Matrix3::Identity();
  Vector3 hard_iron_ut = Vector3::Zero();   ///< sensor axes, subtracted
  Matrix3 soft_iron = Matrix3::Identity();  ///< applied after it
  TimeNs range_lag_ns = 0;
  std::optional<double> battery_low_v;
  bool magnetometer_calibrated = true;  ///< hard iron is configured, be it zero
};

struct Limits {
  double settled_enter_m = 2.0;
  double settled_leave_m = 3.0;
  double lost_radius_m = 50.0;
  double range_max_m = 300.0;
  TimeNs tick_ns = 100 * ns_per_ms;
  TimeNs delay_max_ns = ns_per_s;
  TimeNs range_stale_ns = 2 * ns_per_s;
  TimeNs inertial_stale_ns = ns_per_s;
  TimeNs anchor_silent_ns = 5 * ns_per_s;
  TimeNs silent_ns = 10 * ns_per_s;
  TimeNs rate_window_ns = 5 * ns_per_s;
  TimeNs health_period_ns = ns_per_s;
  double missing_share_max = 0.3;
  std::uint32_t unknown_devices_max = 64;
};

struct Settings {
  fusion::Site site;
  std::vector<TagSettings> tags;
  std::vector<std::uint32_t> anchor_devices;  ///< device numbers under which anchors report for tags
  std::vector<LinkSettings> links;            ///< links[i] is source i + 1
  Limits limits;
};

}  // namespace kedge::pipeline
