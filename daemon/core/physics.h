// Physical constants and where they come from.
#pragma once

namespace kedge {

/// Normal gravity at 45 degrees latitude, m/s2 (WGS 84, Somigliana formula); sites may configure theirs.
inline constexpr double gravity_mps2_default = 9.80620;

/// Propagation speed of radio in air, m/s; configurable per site. In vacuum 299792458 exactly (SI).
inline constexpr double propagation_speed_mps_default = 299702547.0;

/// Time unit of two-way ranging counters: 1 / (128 x 499.2 MHz), seconds (IEEE 802.15.4 HRP UWB).
inline constexpr double ranging_tick_s = 1.0 / (128.0 * 499.2e6);

}  // namespace kedge
