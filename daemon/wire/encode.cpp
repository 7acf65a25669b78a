#include "wire/encode.h"

#include <algorithm>
#include <string>

#include "core/assert.h"
#include "wire/cobs.h"
#include "wire/crc32c.h"
#include "wire/limits.h"

namespace kedge::wire {
namespace {

float to_float(double value) { return static_cast<float>(value); }

template <class Repeated>
void add(Repeated& values, const Vector3& v) {
  for (int axis = 0; axis < 3; ++axis) values.Add(to_float(v[axis]));
}

void fill(packets::v1::Packet& message, const InertialBatch& batch) {
  KEDGE_ASSERT(batch.count > 0 && batch.count <= samples_per_packet_max);
  auto& inertial = *message.mutable_inertial();
  inertial.set_sample_interval_us(batch.sample_interval_us);
  const std::span samples(batch.samples.data(), batch.count);
  const bool field_each = samples.front().has_field;
  for (const InertialSample& sample : samples) {
    add(*inertial.mutable_specific_force_mps2(), sample.specific_force_mps2);
    add(*inertial.mutable_angular_rate_radps(), sample.angular_rate_radps);
    if (field_each) add(*inertial.mutable_magnetic_field_ut(), sample.magnetic_field_ut);
  }
  if (!field_each && samples.back().has_field) {
    add(*inertial.mutable_magnetic_field_ut(), samples.back().magnetic_field_ut);
  }
  if (batch.pressure_pa) inertial.set_pressure_pa(to_float(*batch.pressure_pa));
  if (batch.temperature_degc) inertial.set_temperature_degc(to_float(*batch.temperature_degc));
  if (batch.battery_v) inertial.set_battery_v(to_float(*batch.battery_v));
}

void fill(packets::v1::Packet& message, const Range& from) {
  auto& range = *message.mutable_range();
  if (from.tag_device_id != message.device_id()) range.set_tag_device_id(from.tag_device_id);
  range.set_anchor_id(from.anchor_id);
  range.mutable_distance()->set_distance_m(to_float(from.range_m));
  if (from.sigma_m) range.mutable_distance()->set_sigma_m(to_float(*from.sigma_m));
  if (from.received_power_dbm) range.set_received_power_dbm(to_float(*from.received_power_dbm));
  if (from.first_path_power_dbm) range.set_first_path_power_dbm(to_float(*from.first_path_power_dbm));
}

void fill(packets::v1::Packet& message, const Travel& from) {
  auto& travel = *message.mutable_travel();
  travel.set_interval_us(from.interval_us);
  if (from.distance_m) travel.set_distance_m(to_float(*from.distance_m));
  if (from.turn_rad) travel.set_turn_rad(to_float(*from.turn_rad));
}

}  // namespace

packets::v1::Packet make_message(const Packet& packet) {
  packets::v1::Packet message;
  message.set_device_id(packet.device_id);
  message.set_sequence(packet.sequence);
  message.set_device_time_us(packet.device_time_us);
  std::visit([&](const auto& body) { fill(message, body); }, packet.body);
  return message;
}

std::vector<std::byte> encode(const packets::v1::Datagram& datagram) {
  std::vector<std::byte> bytes(datagram.ByteSizeLong());
  KEDGE_ASSERT(datagram.SerializeToArray(bytes.data(), static_cast<int>(bytes.size())));
  return bytes;
}

std::vector<std::byte> encode(const Packet& packet) {
  packets::v1::Datagram datagram;
  *datagram.add_packets() = make_message(packet);
  return encode(datagram);
}

std::vector<std::byte> frame(std::span<const std::byte> datagram) {
  std::vector<std::byte> checked(datagram.begin(), datagram.end());
  const std::uint32_t check = crc32c(datagram);
  for (std::size_t i = 0; i < frame_check_bytes; ++i) checked.push_back(static_cast<std::byte>(check >> (8 * i)));
  std::vector<std::byte> framed(cobs_encoded_max(checked.size()) + 1);
  const std::size_t size = cobs_encode(checked, framed);
  framed.resize(size + 1);
  framed.back() = std::byte{0};
  return framed;
}

}  // namespace kedge::wire
