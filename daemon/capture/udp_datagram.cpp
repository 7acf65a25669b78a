#include "capture/udp_datagram.h"

#include <fmt/core.h>

#include <algorithm>

#include "core/assert.h"

namespace kedge::capture {

namespace {

constexpr std::size_t udp_header = 8;
constexpr std::size_t ip4_header = 20;
constexpr std::size_t ip6_header = 40;
constexpr std::uint8_t protocol_udp = 17;
constexpr std::uint8_t hop_limit = 64;

/// Network order.
class Writer {
 public:
  explicit Writer(std::vector<std::byte>& out) : out_(out) {}
  void u8(unsigned value) { out_.push_back(static_cast<std::byte>(value)); }
  void u16(std::size_t value) {
    u8(static_cast<unsigned>(value >> 8U) & 0xFFU);
    u8(static_cast<unsigned>(value) & 0xFFU);
  }
  void address(const Endpoint& end, std::size_t size) {
    for (std::size_t i = 0; i < size; ++i) u8(end.address[i]);
  }

 private:
  std::vector<std::byte>& out_;
};

std::size_t u16_at(std::span<const std::byte> bytes, std::size_t at) {
  return (std::to_integer<std::size_t>(bytes[at]) << 8U) | std::to_integer<std::size_t>(bytes[at + 1]);
}

/// Sum of 16-bit words for the internet checksum (RFC 1071); an odd last byte counts as the high one.
std::uint64_t word_sum(std::span<const std::byte> bytes) {
  std::uint64_t sum = 0;
  for (std::size_t i = 0; i + 1 < bytes.size(); i += 2) sum += u16_at(bytes, i);
  if (bytes.size() % 2 == 1) sum += std::to_integer<std::uint64_t>(bytes.back()) << 8U;
  return sum;
}

std::uint16_t checksum(std::uint64_t sum) {
  while (sum > 0xFFFFU) sum = (sum & 0xFFFFU) + (sum >> 16U);
  return static_cast<std::uint16_t>(~sum & 0xFFFFU);
}

void set_u16(std::vector<std::byte>& out, std::size_t at, std::uint16_t value) {
  out[at] = static_cast<std::byte>(value >> 8U);
  out[at + 1] = static_cast<std::byte>(value & 0xFFU);
}

Endpoint endpoint(std::span<const std::byte> address, std::size_t port) {
  Endpoint end;
  std::transform(address.begin(), address.end(), end.address.begin(),
                 [](std::byte b) { return std::to_integer<std::uint8_t>(b); });
  end.port = static_cast<std::uint16_t>(port);
  return end;
}

}  // namespace

std::size_t header_bytes(Family family) {
  switch (family) {
    case Family::none:
      return 0;
    case Family::v4:
      return ip4_header + udp_header;
    case Family::v6:
      return ip6_header + udp_header;
  }
  return 0;
}

std::size_t payload_bytes_max(Family family) {
  switch (family) {
    case Family::none:
      return 0;
    case Family::v4:
      return 0xFFFF - ip4_header - udp_header;
    case Family::v6:
      return 0xFFFF - udp_header;
  }
  return 0;
}

void append_datagram(std::vector<std::byte>& out, const UdpPath& path, std::span<const std::byte> payload) {
  KEDGE_ASSERT(path.family != Family::none && payload.size() <= payload_bytes_max(path.family));
  const bool v4 = path.family == Family::v4;
  const std::size_t start = out.size();
  const std::size_t udp_length = udp_header + payload.size();
  const std::size_t address_bytes = v4 ? 4 : 16;
  Writer put(out);
  if (v4) {
    put.u16(0x4500);
    put.u16(ip4_header + udp_length);
    put.u16(0);       // identification
    put.u16(0x4000);  // do not fragment
    put.u8(hop_limit);
    put.u8(protocol_udp);
    put.u16(0);  // checksum, below
  } else {
    put.u16(0x6000);
    put.u16(0);
    put.u16(udp_length);
    put.u8(protocol_udp);
    put.u8(hop_limit);
  }
  put.address(path.from, address_bytes);
  put.address(path.to, address_bytes);
  const std::size_t udp = out.size();
  if (v4) set_u16(out, start + 10, checksum(word_sum(std::span(out).subspan(start))));
  put.u16(path.from.port);
  put.u16(path.to.port);
  put.u16(udp_length);
  put.u16(0);  // checksum, below
  out.insert(out.end(), payload.begin(), payload.end());

  const auto addresses = std::span(out).subspan(udp - 2 * address_bytes, 2 * address_bytes);
  const std::uint64_t pseudo_header = word_sum(addresses) + udp_length + protocol_udp;
  const std::uint16_t sum = checksum(pseudo_header + word_sum(std::span(out).subspan(udp)));
  // Zero would mean "no checksum" (RFC 768).
  set_u16(out, udp + 6, sum == 0 ? std::uint16_t{0xFFFF} : sum);
}

Result<std::span<const std::byte>> split_datagram(std::span<const std::byte> datagram, UdpPath& path) {
  const unsigned version = datagram.empty() ? 0 : std::to_integer<unsigned>(datagram[0]) >> 4U;
  if (version != 4 && version != 6) return Error{fmt::format("not an IP packet: version {}, not 4 or 6", version)};
  const Family family = version == 4 ? Family::v4 : Family::v6;
  const std::size_t headers = header_bytes(family);
  if (datagram.size() < headers) {
    return Error{fmt::format("a datagram of {} bytes is shorter than its headers of {}", datagram.size(), headers)};
  }
  const std::size_t udp = headers - udp_header;
  const bool plain =
      family == Family::v4
          ? u16_at(datagram, 0) == 0x4500 && u16_at(datagram, 2) == datagram.size() &&
                (u16_at(datagram, 6) & 0x3FFFU) == 0 && datagram[9] == std::byte{protocol_udp}
          : u16_at(datagram, 4) == datagram.size() - ip6_header && datagram[6] == std::byte{protocol_udp};
  if (!plain || u16_at(datagram, udp + 4) != datagram.size() - udp) {
    return Error{"not one whole UDP datagram without IP options"};
  }
  const std::size_t address_bytes = family == Family::v4 ? 4 : 16;
  const auto addresses = datagram.subspan(udp - 2 * address_bytes);
  path.family = family;
  path.from = endpoint(addresses.first(address_bytes), u16_at(datagram, udp));
  path.to = endpoint(addresses.subspan(address_bytes, address_bytes), u16_at(datagram, udp + 2));
  return datagram.subspan(headers);
}

}  // namespace kedge::capture
