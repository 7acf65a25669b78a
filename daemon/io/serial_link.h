// Devices on a serial line: any tty, also a pseudo-terminal.
#pragma once

#include <asio/io_context.hpp>
#include <cstdint>
#include <memory>
#include <string>

#include "io/link.h"

namespace kedge::io {

struct SerialLinkOptions {
  SourceId source = 0;
  std::string name;    ///< the configuration's, for texts
  std::string device;  ///< path; may be a symbolic link, followed anew at each opening
  std::uint32_t baud = 115200;
};

/// Raw mode, 8 data bits, no parity, one stop bit. A port that ends or fails is opened again after
/// 0.25 s, 0.5 s, ... 5 s; so is one whose path leads to another device than the open one.
class SerialLink final : public Link {
 public:
  SerialLink(asio::io_context& context, SerialLinkOptions options, LinkEvents& events);
  ~SerialLink() override;

  [[nodiscard]] Status open() override;
  void close() override;
  [[nodiscard]] const LinkCounters& counters() const override;

 private:
  class State;
  std::shared_ptr<State> state_;
};

}  // namespace kedge::io
