// One UDP socket for each tag, as if each had a radio bridge of its own.
#pragma once

#include <sys/socket.h>

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "core/result.h"

namespace kedge::simulate {

class UdpSender {
 public:
  UdpSender() = default;
  ~UdpSender();
  UdpSender(const UdpSender&) = delete;
  UdpSender& operator=(const UdpSender&) = delete;

  [[nodiscard]] Status open(const std::string& host_port, std::size_t tags);
  /// What the system refuses (nobody listens, say) is counted and lost, like a datagram on the air.
  void send(std::size_t tag, std::span<const std::byte> datagram);
  [[nodiscard]] std::uint64_t refused() const { return refused_; }

 private:
  std::vector<int> sockets_;
  std::uint64_t refused_ = 0;
};

}  // namespace kedge::simulate
