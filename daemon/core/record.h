// The one thing that enters the engine.
//
// Whatever can change a result is a record: what links received, as bytes, and what the station
// itself noted (ticks, clock offsets, an operator's word), as a serialised StationRecord. The order in
// which the engine accepts records is the truth; a capture keeps that order.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>

#include "core/time.h"

namespace kedge {

/// 0 is the station itself; links follow as 1, 2, ... in the order of the configuration.
using SourceId = std::uint32_t;

inline constexpr SourceId station_source = 0;

struct RawRecord {
  TimeNs time_ns = 0;                ///< arrival, station monotonic time
  SourceId source = station_source;  ///< where it came from
  std::uint64_t sequence = 0;        ///< counts the records of this source from 0
  std::span<const std::byte> bytes;  ///< a datagram, a chunk of serial bytes, or a StationRecord
};

}  // namespace kedge
