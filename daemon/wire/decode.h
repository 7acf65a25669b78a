// The door: bytes of a datagram to packets that make sense.
//
// Each packet is read and checked by itself, so that a bad one takes no other with it. What no sensor
// can mean is refused with the field, the figure, its unit and the likely cause; what is merely unusual
// passes, for the filters judge that better.
#pragma once

#include <cstddef>
#include <cstdint>
#include <memory>
#include <span>
#include <string_view>

#include "wire/packet.h"

namespace kedge::wire {

enum class RefusalCode : std::uint8_t {
  malformed,    ///< not a packet at all
  implausible,  ///< a figure no sensor can mean
};

struct Refusal {
  DeviceId device_id = 0;  ///< 0 where it could not be read
  RefusalCode code = RefusalCode::malformed;
  std::string_view text;  ///< valid during the call only
};

/// Receives what a datagram held, in its order. Called from within Decoder::decode.
class PacketSink {
 public:
  PacketSink() = default;
  PacketSink(const PacketSink&) = delete;
  PacketSink& operator=(const PacketSink&) = delete;
  virtual ~PacketSink() = default;

  virtual void packet(const Packet& packet) = 0;
  virtual void refused(const Refusal& refusal) = 0;
};

/// Keeps its memory between datagrams and no other state: every datagram stands for itself.
class Decoder {
 public:
  /// The speed turns two-way counters into metres.
  explicit Decoder(double propagation_speed_mps);
  ~Decoder();
  Decoder(const Decoder&) = delete;
  Decoder& operator=(const Decoder&) = delete;

  /// A datagram of more than datagram_bytes_max is refused whole; of more than
  /// packets_per_datagram_max packets the first ones are taken.
  void decode(std::span<const std::byte> datagram, PacketSink& sink);

 private:
  class Memory;
  std::unique_ptr<Memory> memory_;
  double propagation_speed_mps_;
};

}  // namespace kedge::wire
