// Where stream clients come in: a TCP port or a Unix-domain socket and its file.
#pragma once

#include <asio/generic/stream_protocol.hpp>
#include <asio/io_context.hpp>
#include <cstdint>
#include <functional>
#include <memory>
#include <string>

#include "config/address.h"
#include "core/result.h"

namespace kedge::io {

using StreamSocket = asio::generic::stream_protocol::socket;

class Listener {
 public:
  /// Gets each client, and its address for texts ("127.0.0.1:50412", or the socket's path).
  using OnClient = std::function<void(StreamSocket, const std::string& peer)>;

  Listener(asio::io_context& context, OnClient on_client);
  ~Listener();
  Listener(const Listener&) = delete;
  Listener& operator=(const Listener&) = delete;

  /// Port 0: any free one.
  [[nodiscard]] Status open_tcp(const config::HostPort& where);

  /// Mode 0660. A socket left there by a program that ended is replaced; one that is listened on, or a
  /// file that is no socket, is an error.
  [[nodiscard]] Status open_local(const std::string& path);

  /// Stops, and removes the socket's file unless someone else has replaced it.
  void close();

  /// The bound TCP port; 0 without one.
  [[nodiscard]] std::uint16_t port() const;

 private:
  class State;
  std::shared_ptr<State> state_;
};

}  // namespace kedge::io
