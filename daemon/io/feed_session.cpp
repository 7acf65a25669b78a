#include "io/feed_session.h"

#include <fmt/core.h>
#include <netinet/in.h>
#include <netinet/tcp.h>
#include <sys/socket.h>

#include <asio/buffer.hpp>
#include <asio/post.hpp>
#include <optional>
#include <span>
#include <utility>

#include "io/json_line.h"

namespace kedge::io {

namespace {

// Written at once, and held by the kernel for one client: what is beyond waits in the outbox, where the
// oldest can be dropped.
constexpr std::size_t gather_bytes = 32U << 10U;
constexpr int send_buffer_bytes = 128 << 10;
// For a refused client to read why, while what it goes on to say is thrown away.
constexpr std::chrono::milliseconds refusal_patience{1000};

// A peer that vanished without a word: asked after 30 s of silence, given up 30 s later.
void notice_dead_peers(int fd) {
  const auto set = [fd](int level, int option, int value) { ::setsockopt(fd, level, option, &value, sizeof(value)); };
  set(SOL_SOCKET, SO_SNDBUF, send_buffer_bytes);
  // These fail on a Unix-domain socket, whose peers cannot vanish so.
  set(SOL_SOCKET, SO_KEEPALIVE, 1);
  set(IPPROTO_TCP, TCP_KEEPIDLE, 30);
  set(IPPROTO_TCP, TCP_KEEPINTVL, 10);
  set(IPPROTO_TCP, TCP_KEEPCNT, 3);
  set(IPPROTO_TCP, TCP_USER_TIMEOUT, 30'000);
  set(IPPROTO_TCP, TCP_NODELAY, 1);
}

}  // namespace

FeedSession::FeedSession(FeedSessions& server, StreamSocket socket, std::string peer, Times times)
    : server_(server),
      socket_(std::move(socket)),
      timer_(socket_.get_executor()),
      peer_(std::move(peer)),
      times_(times) {}

void FeedSession::start() {
  notice_dead_peers(socket_.native_handle());
  within(times_.subscribe_max, [this] {
    refuse(fmt::format("nothing was asked for within {} s; the client speaks first, such as {{\"subscribe\":{{}}}}",
                       std::chrono::duration<double>(times_.subscribe_max).count()));
  });
  hear();
}

void FeedSession::refuse(std::string_view why) {
  if (refused_ || ended_) return;
  refused_ = true;
  subscriber_.reset();
  server_.count_refused();
  server_.log(fmt::format("feed client {} refused: {}", peer_, why));
  // In the middle of a delimited stream a line of text would be taken for a message.
  if (!delimited_) last_line_ = error_line(why);
  if (!writing_) write();
}

void FeedSession::finish() {
  finishing_ = true;
  if (!subscriber_ && !refused_) {
    leave("the station stops");
  } else if (!writing_) {
    write();
  }
}

void FeedSession::end() {
  ended_ = true;
  subscriber_.reset();
  asio::error_code ignored;
  socket_.close(ignored);
  timer_.cancel(ignored);
}

void FeedSession::leave(std::string_view why) {
  if (!refused_) server_.log(fmt::format("feed client {} left: {}", peer_, why));
  end();
  server_.left(shared_from_this());
}

// Calls `action` after `time` unless the timer is set anew or cancelled before.
template <class Action>
void FeedSession::within(std::chrono::milliseconds time, Action action) {
  timer_.expires_after(time);
  timer_.async_wait([self = shared_from_this(), action](const asio::error_code& error) {
    // A wait that had run out when the timer was set anew comes without an error.
    if (!error && !self->ended_ && self->timer_.expiry() <= asio::steady_timer::clock_type::now()) action();
  });
}

void FeedSession::hear() {
  socket_.async_read_some(asio::buffer(chunk_),
                          [self = shared_from_this()](const asio::error_code& error, std::size_t count) {
                            if (self->ended_) return;
                            if (error) {
                              self->hung_up(error);
                            } else {
                              self->heard(count);
                            }
                          });
}

void FeedSession::heard(std::size_t count) {
  if (!refused_) {
    Result<std::optional<feed::Request>> request = reader_.take(std::span(chunk_).first(count));
    if (!request) {
      refuse(request.error());
    } else if (*request) {
      const auto ready = [weak = weak_from_this()] {
        if (const auto self = weak.lock()) self->write_soon();
      };
      if (Result<std::shared_ptr<feed::Subscriber>> made = server_.distributor().subscribe(**request, ready)) {
        subscriber_ = *std::move(made);
        delimited_ = (**request).encoding == feed::Encoding::delimited;
        timer_.cancel();
        server_.log(fmt::format("feed client {} subscribed", peer_));
        write();
      } else {
        refuse(made.error());
      }
    }
  }
  if (!ended_) hear();
}

void FeedSession::hung_up(const asio::error_code& error) {
  if (error == asio::error::eof && subscriber_) {
    // It has nothing more to say but may go on listening; this waits for it to be gone altogether.
    socket_.async_wait(StreamSocket::wait_error, [self = shared_from_this()](const asio::error_code&) {
      if (!self->ended_) self->leave("it hung up");
    });
    return;
  }
  if (error == asio::error::eof && !refused_) {
    refuse("the connection was closed before the request was complete; a JSON line ends with a line feed");
    return;
  }
  leave(error == asio::error::eof ? "it hung up" : error.message());
}

// Not from within the distributor's call: what the same tick says to this client is written at once.
void FeedSession::write_soon() {
  if (writing_ || std::exchange(write_is_due_, true)) return;
  asio::post(socket_.get_executor(), [self = shared_from_this()] {
    self->write_is_due_ = false;
    if (!self->ended_ && !self->writing_) self->write();
  });
}

void FeedSession::write() {
  out_.clear();
  out_done_ = 0;
  while (subscriber_ && out_.size() < gather_bytes) {
    const feed::SharedBytes bytes = subscriber_->next();
    if (!bytes) break;
    out_ += *bytes;
  }
  out_ += std::exchange(last_line_, {});
  if (out_.empty()) {
    written_all();
    return;
  }
  writing_ = true;
  write_rest();
}

void FeedSession::write_rest() {
  within(times_.stall_max, [this] {
    server_.count_stalled();
    leave(fmt::format("it took nothing for {} s", std::chrono::duration<double>(times_.stall_max).count()));
  });
  socket_.async_write_some(asio::buffer(out_) + out_done_,
                           [self = shared_from_this()](const asio::error_code& error, std::size_t count) {
                             if (self->ended_) return;
                             if (error) {
                               self->leave(error.message());
                               return;
                             }
                             self->out_done_ += count;
                             if (self->out_done_ < self->out_.size()) {
                               self->write_rest();
                             } else {
                               self->writing_ = false;
                               self->write();
                             }
                           });
}

void FeedSession::written_all() {
  timer_.cancel();
  if (!refused_ && !finishing_) return;
  if (finishing_) {
    leave("the station stops");
    return;
  }
  // Closing with unread input would reset the connection and take the refusal away from the client.
  asio::error_code ignored;
  socket_.shutdown(StreamSocket::shutdown_send, ignored);
  within(refusal_patience, [this] { leave("refused"); });
}

}  // namespace kedge::io
