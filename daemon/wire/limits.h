// How much one datagram may hold. A device that keeps to it is never refused for size on any link.
#pragma once

#include <cstddef>

#include "wire/cobs.h"

namespace kedge::wire {

inline constexpr std::size_t datagram_bytes_max = 2048;
inline constexpr std::size_t packets_per_datagram_max = 64;

/// Of the CRC-32C behind the datagram in a serial frame.
inline constexpr std::size_t frame_check_bytes = 4;

/// A serial frame as sent, the ending zero not counted.
inline constexpr std::size_t frame_bytes_max = cobs_encoded_max(datagram_bytes_max + frame_check_bytes);

}  // namespace kedge::wire
