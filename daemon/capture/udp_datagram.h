// Datagrams as they were on the network: a capture stores their IP and UDP headers, made anew from the
// addresses, so that network tools can follow them. Fields that the station never sees (time to live,
// identification) have fixed values. Sources: RFC 791, RFC 8200, RFC 768, RFC 1071.
#pragma once

#include <cstddef>
#include <span>
#include <vector>

#include "capture/arrival.h"
#include "core/result.h"

namespace kedge::capture {

/// Size of IP and UDP headers together; 0 for Family::none.
std::size_t header_bytes(Family family);
/// Most payload bytes a datagram of this family can carry (without jumbograms); 0 for Family::none.
std::size_t payload_bytes_max(Family family);

/// Appends headers and payload to `out`. Precondition: the payload fits the family.
void append_datagram(std::vector<std::byte>& out, const UdpPath& path, std::span<const std::byte> payload);

/// The payload within `datagram`, and its path. Fails on whatever append_datagram does not make,
/// except that checksums are left to who reads.
Result<std::span<const std::byte>> split_datagram(std::span<const std::byte> datagram, UdpPath& path);

}  // namespace kedge::capture
