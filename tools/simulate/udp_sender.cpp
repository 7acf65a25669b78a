#include "simulate/udp_sender.h"

#include <fmt/core.h>
#include <netdb.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <memory>

#include "config/address.h"

namespace kedge::simulate {

UdpSender::~UdpSender() {
  for (const int socket : sockets_) ::close(socket);
}

Status UdpSender::open(const std::string& host_port, std::size_t tags) {
  const auto address = config::parse_host_port(host_port);
  if (!address) return Error{fmt::format("--udp {}: {}", host_port, address.error())};
  addrinfo hints = {};
  hints.ai_socktype = SOCK_DGRAM;
  hints.ai_flags = AI_NUMERICHOST | AI_NUMERICSERV;
  addrinfo* found = nullptr;
  const int code = getaddrinfo(address->host.c_str(), std::to_string(address->port).c_str(), &hints, &found);
  if (code != 0) return Error{fmt::format("--udp {}: {}", host_port, gai_strerror(code))};
  const std::unique_ptr<addrinfo, void (*)(addrinfo*)> owner(found, freeaddrinfo);
  for (std::size_t i = 0; i < tags; ++i) {
    const int socket = ::socket(found->ai_family, SOCK_DGRAM | SOCK_CLOEXEC, 0);
    if (socket < 0) return Error{fmt::format("--udp {}: no socket: {}", host_port, std::strerror(errno))};
    sockets_.push_back(socket);
    if (connect(socket, found->ai_addr, found->ai_addrlen) != 0) {
      return Error{fmt::format("--udp {}: cannot be reached: {}", host_port, std::strerror(errno))};
    }
  }
  return {};
}

void UdpSender::send(std::size_t tag, std::span<const std::byte> datagram) {
  if (::send(sockets_.at(tag), datagram.data(), datagram.size(), MSG_DONTWAIT) < 0) ++refused_;
}

}  // namespace kedge::simulate
