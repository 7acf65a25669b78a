// A link is where bytes come in: a UDP socket or a serial port.
//
// A link knows nothing of packets. It stamps what arrives, hands it over at once, and says when it
// opens, fails and loses something. All of it happens on the one thread that runs the io_context;
// no event comes from within open() except state_changed, and none after close().
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <string_view>

#include "capture/arrival.h"
#include "core/record.h"
#include "core/result.h"
#include "core/time.h"

namespace kedge::io {

/// Longest datagram that is handed over whole; of a longer one, as many bytes and one more are, so that it
/// is refused where all bad input is: on record, counted, and with its reason.
inline constexpr std::size_t datagram_bytes_max = 2048;
/// Longest piece of serial bytes handed over at once.
inline constexpr std::size_t serial_chunk_bytes_max = 1024;

/// What links tell the runtime. Must outlive the links. `bytes` and `path` are valid during the call only.
class LinkEvents {
 public:
  LinkEvents() = default;
  LinkEvents(const LinkEvents&) = delete;
  LinkEvents& operator=(const LinkEvents&) = delete;
  virtual ~LinkEvents() = default;

  /// A datagram with the path it took, or a piece of a serial stream (path.family none).
  /// arrival_ns: station monotonic time.
  virtual void received(SourceId source, TimeNs arrival_ns, std::span<const std::byte> bytes,
                        const capture::UdpPath& path) = 0;

  /// The link opened, or is not open for `reason`. Said on every change, not on every attempt.
  virtual void state_changed(SourceId source, bool open, std::string_view reason) = 0;

  /// Input that arrived at the station and is lost: dropped by the kernel because the socket's buffer was
  /// full (bytes unknown, 0). At most a few calls a turn.
  virtual void shed(SourceId source, std::uint64_t records, std::uint64_t bytes, std::string_view reason) = 0;
};

struct LinkCounters {
  std::uint64_t records = 0;  ///< datagrams or pieces handed over
  std::uint64_t bytes = 0;    ///< in them
  std::uint64_t dropped_by_kernel = 0;
  std::uint64_t openings = 0;
};

class Link {
 public:
  Link() = default;
  Link(const Link&) = delete;
  Link& operator=(const Link&) = delete;
  virtual ~Link() = default;

  /// Starts to read; call once. A UDP link that cannot bind is an error. A serial device that is missing
  /// is none: the link says state_changed(false) and opens it when it appears.
  [[nodiscard]] virtual Status open() = 0;

  /// Ends it; also done by the destructor.
  virtual void close() = 0;

  [[nodiscard]] virtual const LinkCounters& counters() const = 0;
};

}  // namespace kedge::io
