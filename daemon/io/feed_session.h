// One client of the feed, from its first byte to its last. A part of io/feed_server.h.
#pragma once

#include <array>
#include <asio/steady_timer.hpp>
#include <chrono>
#include <cstddef>
#include <memory>
#include <string>
#include <string_view>

#include "feed/distributor.h"
#include "feed/subscription.h"
#include "io/listener.h"

namespace kedge::io {

class FeedSession;

/// What a session needs of its server. Not touched any more once the session has ended.
class FeedSessions {
 public:
  FeedSessions() = default;
  FeedSessions(const FeedSessions&) = delete;
  FeedSessions& operator=(const FeedSessions&) = delete;
  virtual ~FeedSessions() = default;

  virtual feed::Distributor& distributor() = 0;
  virtual void log(std::string_view line) = 0;
  virtual void count_refused() = 0;
  virtual void count_stalled() = 0;
  /// The session is over: forget it.
  virtual void left(const std::shared_ptr<FeedSession>& session) = 0;
};

class FeedSession : public std::enable_shared_from_this<FeedSession> {
 public:
  struct Times {
    std::chrono::milliseconds subscribe_max;
    std::chrono::milliseconds stall_max;
  };

  FeedSession(FeedSessions& server, StreamSocket socket, std::string peer, Times times);

  void start();
  /// Says why in one line, and ends the connection once the client can have read it.
  void refuse(std::string_view why);
  /// Writes what waits, then ends.
  void finish();
  /// Ends at once; no handler does anything after it.
  void end();

  [[nodiscard]] bool refused() const { return refused_; }

 private:
  void hear();
  void heard(std::size_t count);
  void hung_up(const asio::error_code& error);
  void write_soon();
  void write();
  void write_rest();
  void written_all();
  void leave(std::string_view why);
  template <class Action>
  void within(std::chrono::milliseconds time, Action action);

  FeedSessions& server_;
  StreamSocket socket_;
  asio::steady_timer timer_;  // to speak first, to take what is written, to read a refusal
  std::string peer_;
  Times times_;
  feed::RequestReader reader_;
  std::shared_ptr<feed::Subscriber> subscriber_;
  std::array<std::byte, 1024> chunk_{};
  std::string out_;  // what is being written
  std::size_t out_done_ = 0;
  std::string last_line_;  // the refusal
  bool delimited_ = false;
  bool write_is_due_ = false;  // posted
  bool writing_ = false;
  bool refused_ = false;
  bool finishing_ = false;
  bool ended_ = false;
};

}  // namespace kedge::io
