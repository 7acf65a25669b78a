// Subscribers over TCP and Unix-domain sockets: the sockets of feed/distributor.h.
//
// The client speaks first and has a few seconds to; its Subscribe is read with bounds. A client that is
// refused gets one line, {"error":"..."}, and the end of the connection (proto/README.md). What waits
// for a client is bounded by its outbox; the server only ever writes without blocking, and a client that
// takes nothing at all for a while is dropped.
#pragma once

#include <asio/io_context.hpp>
#include <chrono>
#include <cstddef>
#include <cstdint>
#include <functional>
#include <memory>
#include <string>
#include <string_view>

#include "core/result.h"
#include "feed/distributor.h"

namespace kedge::io {

struct FeedServerOptions {
  std::string tcp;            ///< as config::parse_host_port takes it; empty: none
  std::string unix_path;      ///< mode 0660; empty: none
  bool allow_remote = false;  ///< a TCP address beyond loopback is an error without it
  std::size_t clients_max = 32;
  std::chrono::milliseconds subscribe_max{5000};  ///< to speak first
  std::chrono::milliseconds stall_max{10000};     ///< while bytes wait and the client takes none
};

struct FeedCounters {
  std::uint64_t clients = 0;        ///< connected now
  std::uint64_t accepted = 0;       ///< since the start
  std::uint64_t refused = 0;        ///< too many clients, no or no good Subscribe
  std::uint64_t stalled = 0;        ///< dropped for taking nothing
  std::uint64_t messages_lost = 0;  ///< that clients were too slow for
};

class FeedServer {
 public:
  /// One line for the log about a client: greeted, refused, gone.
  using Log = std::function<void(std::string_view line)>;

  /// `distributor` must outlive the server; it does not need to know of it.
  FeedServer(asio::io_context& context, FeedServerOptions options, feed::Distributor& distributor, Log log);
  ~FeedServer();
  FeedServer(const FeedServer&) = delete;
  FeedServer& operator=(const FeedServer&) = delete;

  [[nodiscard]] Status open();

  /// Accepts no more, and gives clients up to `patience` to take what waits for them; then ends them.
  /// `done` is called once, from the loop, unless the server is destroyed before.
  void finish(std::chrono::milliseconds patience, std::function<void()> done);

  [[nodiscard]] FeedCounters counters() const;

  /// The bound TCP port; 0 without one.
  [[nodiscard]] std::uint16_t tcp_port() const;

 private:
  class State;
  std::unique_ptr<State> state_;
};

}  // namespace kedge::io
