// Devices that send datagrams over IPv4 or IPv6.
#pragma once

#include <asio/io_context.hpp>
#include <cstdint>
#include <memory>
#include <string>

#include "io/link.h"

namespace kedge::io {

struct UdpLinkOptions {
  SourceId source = 0;
  std::string name;                   ///< the configuration's, for texts
  std::string address = "127.0.0.1";  ///< numeric; "::" takes both families, "fe80::1%eth0" names a zone
  std::uint16_t port = 0;             ///< 0: any free one, see local_port()
};

/// Arrival is the kernel's receive stamp (SO_TIMESTAMPNS). At most a few dozen datagrams are taken in one
/// turn of the loop, so that a flood on one link leaves time for the rest.
class UdpLink final : public Link {
 public:
  UdpLink(asio::io_context& context, UdpLinkOptions options, LinkEvents& events);
  ~UdpLink() override;

  [[nodiscard]] Status open() override;
  void close() override;
  [[nodiscard]] const LinkCounters& counters() const override;

  /// The bound port; 0 while closed.
  [[nodiscard]] std::uint16_t local_port() const;

 private:
  class State;
  std::shared_ptr<State> state_;
};

}  // namespace kedge::io
