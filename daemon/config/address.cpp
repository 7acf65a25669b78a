#include "config/address.h"

#include <arpa/inet.h>
#include <fmt/format.h>

#include <charconv>

#include "config/source.h"

namespace kedge::config {
namespace {

bool is_v4(const std::string& host) {
  in_addr address{};
  return inet_pton(AF_INET, host.c_str(), &address) == 1;
}

bool is_v6(const std::string& host) {
  in6_addr address{};
  return inet_pton(AF_INET6, host.c_str(), &address) == 1;
}

}  // namespace

bool is_ip_address(const std::string& host) { return is_v4(host) || is_v6(host); }

bool is_loopback(const std::string& host) {
  in6_addr address{};
  if (inet_pton(AF_INET6, host.c_str(), &address) == 1) return IN6_IS_ADDR_LOOPBACK(&address);
  return host.starts_with("127.");
}

Result<HostPort> parse_host_port(std::string_view text) {
  const Error wrong{
      fmt::format("is {}; it must be an address in numbers and a port of 1 to 65535, such as "
                  "127.0.0.1:47810 or [::1]:47810",
                  in_quotes(text))};
  const auto colon = text.rfind(':');
  if (colon == std::string_view::npos) return wrong;
  const std::string_view digits = text.substr(colon + 1);
  HostPort parsed;
  const auto [end, code] = std::from_chars(digits.data(), digits.data() + digits.size(), parsed.port);
  if (code != std::errc() || end != digits.data() + digits.size() || parsed.port == 0) return wrong;
  std::string_view host = text.substr(0, colon);
  const bool bracketed = host.size() > 2 && host.front() == '[' && host.back() == ']';
  if (bracketed) host = host.substr(1, host.size() - 2);
  parsed.host = host == "localhost" ? "127.0.0.1" : std::string(host);
  if (bracketed ? !is_v6(parsed.host) : !is_v4(parsed.host)) return wrong;
  return parsed;
}

}  // namespace kedge::config
