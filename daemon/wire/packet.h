// A decoded packet in plain fixed-size form: what the engine works on.
//
// Made by wire/decode.h from the bytes of a Datagram (proto/packets.proto), after every field has
// passed the plausibility check at the door. Nothing here allocates.
#pragma once

#include <array>
#include <cstdint>
#include <optional>
#include <variant>

#include "core/rotation.h"

namespace kedge::wire {

using DeviceId = std::uint32_t;

inline constexpr std::size_t samples_per_packet_max = 32;

struct InertialSample {
  Vector3 specific_force_mps2 = Vector3::Zero();  ///< sensor axes
  Vector3 angular_rate_radps = Vector3::Zero();   ///< sensor axes
  Vector3 magnetic_field_ut = Vector3::Zero();    ///< sensor axes, where has_field
  bool has_field = false;
};

struct InertialBatch {
  std::uint32_t sample_interval_us = 0;
  std::uint32_t count = 0;
  std::array<InertialSample, samples_per_packet_max> samples;
  std::optional<double> pressure_pa;       ///< at the last sample
  std::optional<double> temperature_degc;  ///< at the last sample
  std::optional<double> battery_v;         ///< at the last sample
};

/// A range as measured, two-way counters already turned into metres (wire/two_way.h).
struct Range {
  DeviceId tag_device_id = 0;  ///< the sender where the packet names none
  std::uint32_t anchor_id = 0;
  double range_m = 0.0;
  std::optional<double> sigma_m;
  std::optional<double> received_power_dbm;
  std::optional<double> first_path_power_dbm;
};

struct Travel {
  std::uint32_t interval_us = 0;
  std::optional<double> distance_m;
  std::optional<double> turn_rad;
};

struct Packet {
  DeviceId device_id = 0;
  std::uint32_t sequence = 0;
  std::uint64_t device_time_us = 0;
  std::variant<InertialBatch, Range, Travel> body;
};

}  // namespace kedge::wire
