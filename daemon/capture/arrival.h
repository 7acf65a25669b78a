// What a capture holds: a head that says how it was made, then the records in the order of acceptance.
#pragma once

#include <array>
#include <cstdint>
#include <string>
#include <vector>

#include "core/record.h"
#include "core/time.h"

namespace kedge::capture {

struct Endpoint {
  std::array<std::uint8_t, 16> address{};  ///< network order; IPv4 uses the first four
  std::uint16_t port = 0;
};

enum class Family : std::uint8_t { none, v4, v6 };

/// Where a datagram came from and went to; family none for everything that is not a datagram.
struct UdpPath {
  Family family = Family::none;
  Endpoint from;  ///< the sender
  Endpoint to;    ///< the station's own socket
};

/// A record and, for datagrams, its way here. The engine sees the record alone.
struct Arrival {
  RawRecord record;
  UdpPath path;
};

enum class LinkKind : std::uint8_t { udp, serial };

struct Link {
  std::string name;
  LinkKind kind = LinkKind::udp;
};

struct CaptureHead {
  std::string program;        ///< "kedged"
  std::string version;        ///< "0.1.0", without spaces
  std::string build;          ///< compiler and flags, one line (core/build_info.h)
  std::string features;       ///< of the processor that ran it, one line
  std::string configuration;  ///< the effective one, text format
  /// UTC minus station monotonic time when the capture was begun. It makes the stamps other programs
  /// show and is taken off again on reading; it never changes within a file.
  TimeNs utc_minus_monotonic_ns = 0;
  std::vector<Link> links;  ///< links[i] is source i + 1
};

/// Most bytes of one record: a UDP datagram can have no more.
inline constexpr std::size_t record_bytes_max = 65535;
/// Most bytes of the configuration.
inline constexpr std::size_t configuration_bytes_max = 4U << 20U;
/// Most links.
inline constexpr std::size_t links_max = 1000;
/// Most bytes of a link's name, and of each one-line text of the head.
inline constexpr std::size_t line_bytes_max = 1000;

}  // namespace kedge::capture
