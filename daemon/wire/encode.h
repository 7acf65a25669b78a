// Packets to bytes: what a device does, for the simulator, the converter and the tests.
//
// The packets themselves are the generated classes of proto/packets.proto; make_message fills one from
// the plain form where that is nearer at hand.
#pragma once

#include <cstddef>
#include <span>
#include <vector>

#include "proto/packets.pb.h"
#include "wire/packet.h"

namespace kedge::wire {

/// Numbers become floats; the field is sent for every sample if the first has one, or for the last
/// alone if only that has one. A range is sent as a distance (two-way counters: fill the message).
[[nodiscard]] packets::v1::Packet make_message(const Packet& packet);

/// The bytes of a UDP datagram, the same for the same message.
[[nodiscard]] std::vector<std::byte> encode(const packets::v1::Datagram& datagram);

/// One packet as a datagram of its own.
[[nodiscard]] std::vector<std::byte> encode(const Packet& packet);

/// The datagram as a serial frame, its ending zero included.
[[nodiscard]] std::vector<std::byte> frame(std::span<const std::byte> datagram);

}  // namespace kedge::wire
