#include "wire/decode.h"

#include <fmt/core.h>
#include <google/protobuf/arena.h>
#include <google/protobuf/io/coded_stream.h>
#include <google/protobuf/wire_format_lite.h>

#include <array>
#include <cstdint>
#include <optional>
#include <string>

#include "proto/packets.pb.h"
#include "wire/limits.h"
#include "wire/plausible.h"
#include "wire/two_way.h"

namespace kedge::wire {
namespace {

namespace pb = google::protobuf;
using pb::internal::WireFormatLite;

struct Objection {
  RefusalCode code;
  std::string text;
};

/// Nothing: all is well.
using Objections = std::optional<Objection>;

Objections malformed(std::string text) { return Objection{RefusalCode::malformed, std::move(text)}; }

Objections implausible(const std::string& text) { return Objection{RefusalCode::implausible, text}; }

Vector3 triple(const pb::RepeatedField<float>& values, int index) {
  return {values[3 * index], values[3 * index + 1], values[3 * index + 2]};
}

Objections check_counts(const packets::v1::Inertial& from) {
  const int forces = from.specific_force_mps2_size();
  const int count = forces / 3;
  if (forces % 3 != 0 || count < 1 || count > static_cast<int>(samples_per_packet_max)) {
    return malformed(fmt::format("inertial: specific_force_mps2 holds {} numbers, not x, y, z of 1 to {} samples",
                                 forces, samples_per_packet_max));
  }
  if (from.angular_rate_radps_size() != forces) {
    return malformed(fmt::format("inertial: angular_rate_radps holds {} numbers, not {} as specific_force_mps2",
                                 from.angular_rate_radps_size(), forces));
  }
  const int fields = from.magnetic_field_ut_size();
  if (fields != 0 && fields != 3 && fields != forces) {
    return malformed(fmt::format("inertial: magnetic_field_ut holds {} numbers, not 0, 3 or {} as specific_force_mps2",
                                 fields, forces));
  }
  return {};
}

Objections read(const packets::v1::Inertial& from, Packet& packet) {
  if (auto objection = check_counts(from)) return objection;
  auto& batch = packet.body.emplace<InertialBatch>();
  const int count = from.specific_force_mps2_size() / 3;
  const int fields = from.magnetic_field_ut_size() / 3;
  batch.sample_interval_us = from.sample_interval_us();
  batch.count = static_cast<std::uint32_t>(count);
  for (int i = 0; i < count; ++i) {
    InertialSample& sample = batch.samples[static_cast<std::size_t>(i)];
    sample.specific_force_mps2 = triple(from.specific_force_mps2(), i);
    sample.angular_rate_radps = triple(from.angular_rate_radps(), i);
    const int field = i - (count - fields);  // fewer fields than samples: they belong to the last
    sample.has_field = field >= 0;
    if (sample.has_field) sample.magnetic_field_ut = triple(from.magnetic_field_ut(), field);
  }
  if (from.has_pressure_pa()) batch.pressure_pa = from.pressure_pa();
  if (from.has_temperature_degc()) batch.temperature_degc = from.temperature_degc();
  if (from.has_battery_v()) batch.battery_v = from.battery_v();
  return {};
}

SingleSided stamps(const packets::v1::SingleSided& from) {
  SingleSided to;
  to.poll_tx = from.poll_tx();
  to.poll_rx = from.poll_rx();
  to.reply_tx = from.reply_tx();
  to.reply_rx = from.reply_rx();
  if (from.has_clock_offset_ppm()) to.clock_offset_ppm = from.clock_offset_ppm();
  return to;
}

DoubleSided stamps(const packets::v1::DoubleSided& from) {
  DoubleSided to;
  to.poll_tx = from.poll_tx();
  to.poll_rx = from.poll_rx();
  to.reply_tx = from.reply_tx();
  to.reply_rx = from.reply_rx();
  to.final_tx = from.final_tx();
  to.final_rx = from.final_rx();
  to.symmetric = from.symmetric();
  return to;
}

SecondReply stamps(const packets::v1::SecondReply& from) {
  SecondReply to;
  to.poll_tx = from.poll_tx();
  to.poll_rx = from.poll_rx();
  to.reply_tx = from.reply_tx();
  to.reply_rx = from.reply_rx();
  to.second_reply_tx = from.second_reply_tx();
  to.second_reply_rx = from.second_reply_rx();
  return to;
}

Objections read(const packets::v1::TwoWay& from, double propagation_speed_mps, Range& range) {
  TwoWay two_way;
  two_way.counter_bits = from.counter_bits();
  switch (from.exchange_case()) {
    case packets::v1::TwoWay::kSingleSided:
      two_way.exchange = stamps(from.single_sided());
      break;
    case packets::v1::TwoWay::kDoubleSided:
      two_way.exchange = stamps(from.double_sided());
      break;
    case packets::v1::TwoWay::kSecondReply:
      two_way.exchange = stamps(from.second_reply());
      break;
    case packets::v1::TwoWay::EXCHANGE_NOT_SET:
      return malformed("range: two_way holds no single_sided, double_sided or second_reply");
  }
  const auto range_m = two_way_range_m(two_way, propagation_speed_mps);
  if (!range_m) return implausible("range: " + range_m.error());
  range.range_m = *range_m;
  return {};
}

Objections read(const packets::v1::Range& from, double propagation_speed_mps, Packet& packet) {
  auto& range = packet.body.emplace<Range>();
  range.tag_device_id = from.has_tag_device_id() ? from.tag_device_id() : packet.device_id;
  if (range.tag_device_id == 0) return malformed("range: tag_device_id is 0; leave it out where the sender is the tag");
  range.anchor_id = from.anchor_id();
  if (from.has_received_power_dbm()) range.received_power_dbm = from.received_power_dbm();
  if (from.has_first_path_power_dbm()) range.first_path_power_dbm = from.first_path_power_dbm();
  if (from.has_two_way()) return read(from.two_way(), propagation_speed_mps, range);
  if (!from.has_distance()) return malformed("range: neither distance nor two_way");
  range.range_m = from.distance().distance_m();
  if (from.distance().has_sigma_m()) range.sigma_m = from.distance().sigma_m();
  return {};
}

Objections read(const packets::v1::Travel& from, Packet& packet) {
  auto& travel = packet.body.emplace<Travel>();
  travel.interval_us = from.interval_us();
  if (from.has_distance_m()) travel.distance_m = from.distance_m();
  if (from.has_turn_rad()) travel.turn_rad = from.turn_rad();
  if (!travel.distance_m && !travel.turn_rad) return malformed("travel: neither distance_m nor turn_rad");
  return {};
}

Objections read(const packets::v1::Packet& from, double propagation_speed_mps, Packet& packet) {
  packet.device_id = from.device_id();
  packet.sequence = from.sequence();
  packet.device_time_us = from.device_time_us();
  if (packet.device_id == 0) return malformed("device_id is 0 or missing");
  Objections objection;
  switch (from.body_case()) {
    case packets::v1::Packet::kInertial:
      objection = read(from.inertial(), packet);
      break;
    case packets::v1::Packet::kRange:
      objection = read(from.range(), propagation_speed_mps, packet);
      break;
    case packets::v1::Packet::kTravel:
      objection = read(from.travel(), packet);
      break;
    case packets::v1::Packet::BODY_NOT_SET:
      return malformed("no inertial, range or travel in it");
  }
  if (objection) return objection;
  if (const auto status = check_plausible(packet); !status) return implausible(status.error());
  return {};
}

}  // namespace

class Decoder::Memory {
 public:
  Memory() : arena_(options(first_block_)) {}

  /// Gives up the packet made before.
  packets::v1::Packet& make_message() {
    arena_.Reset();
    return *pb::Arena::CreateMessage<packets::v1::Packet>(&arena_);
  }

  Packet packet;

 private:
  // Packets seldom need more; if one does, Reset returns the rest.
  using Block = std::array<char, std::size_t{32} * 1024>;

  static pb::ArenaOptions options(Block& block) {
    pb::ArenaOptions options;
    options.initial_block = block.data();
    options.initial_block_size = block.size();
    return options;
  }

  alignas(std::max_align_t) Block first_block_;
  pb::Arena arena_;
};

Decoder::Decoder(double propagation_speed_mps)
    : memory_(std::make_unique<Memory>()), propagation_speed_mps_(propagation_speed_mps) {}

Decoder::~Decoder() = default;

void Decoder::decode(std::span<const std::byte> datagram, PacketSink& sink) {
  const auto refuse = [&](DeviceId device_id, const Objection& objection) {
    sink.refused({.device_id = device_id, .code = objection.code, .text = objection.text});
  };
  if (datagram.size() > datagram_bytes_max) {
    // A link cuts what is longer, so its length is not known here.
    return refuse(
        0, *malformed(fmt::format("datagram is longer than {} bytes; send fewer packets in each", datagram_bytes_max)));
  }
  constexpr auto packets_tag =
      WireFormatLite::MakeTag(packets::v1::Datagram::kPacketsFieldNumber, WireFormatLite::WIRETYPE_LENGTH_DELIMITED);
  const auto* bytes = reinterpret_cast<const std::uint8_t*>(datagram.data());
  const int size = static_cast<int>(datagram.size());
  pb::io::CodedInputStream in(bytes, size);
  std::size_t packets = 0;
  int at = 0;  // all before it is read
  while (const auto tag = in.ReadTag()) {
    if (tag != packets_tag) {
      if (!WireFormatLite::SkipField(&in, tag)) break;
      at = in.CurrentPosition();
      continue;
    }
    int length = 0;
    if (!in.ReadVarintSizeAsInt(&length) || length > size - in.CurrentPosition()) break;
    const int start = in.CurrentPosition();
    in.Skip(length);
    at = in.CurrentPosition();
    if (++packets > packets_per_datagram_max) continue;
    auto& message = memory_->make_message();
    if (!message.ParseFromArray(bytes + start, length)) {
      refuse(message.device_id(),
             *malformed(fmt::format("packet of {} bytes at byte {} of the datagram cannot be read", length, start)));
    } else if (const auto objection = read(message, propagation_speed_mps_, memory_->packet)) {
      refuse(message.device_id(), *objection);
    } else {
      sink.packet(memory_->packet);
    }
  }
  if (packets > packets_per_datagram_max) {
    refuse(0, *malformed(
                  fmt::format("datagram of {} packets: the first {} were taken", packets, packets_per_datagram_max)));
  }
  if (at < size) refuse(0, *malformed(fmt::format("datagram of {} bytes cannot be read from byte {} on", size, at)));
  if (size == 0) refuse(0, *malformed("datagram is empty"));
}

}  // namespace kedge::wire
