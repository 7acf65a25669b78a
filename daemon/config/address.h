// Network addresses as the configuration writes them: numbers, no names, so that a start never waits
// for a name server.
#pragma once

#include <cstdint>
#include <string>
#include <string_view>

#include "core/result.h"

namespace kedge::config {

struct HostPort {
  std::string host;  ///< IPv4 or IPv6 in numbers, without brackets
  std::uint16_t port = 0;
};

/// "127.0.0.1:47810", "[::1]:47810" or "localhost:47810" (which is 127.0.0.1).
[[nodiscard]] Result<HostPort> parse_host_port(std::string_view text);

/// An IPv4 or IPv6 address in numbers.
[[nodiscard]] bool is_ip_address(const std::string& host);

/// 127.0.0.0/8 or ::1. Precondition: is_ip_address(host).
[[nodiscard]] bool is_loopback(const std::string& host);

}  // namespace kedge::config
