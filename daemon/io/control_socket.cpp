#include "io/control_socket.h"

#include <fmt/core.h>
#include <google/protobuf/util/json_util.h>

#include <array>
#include <asio/buffer.hpp>
#include <asio/steady_timer.hpp>
#include <asio/write.hpp>
#include <chrono>
#include <cstddef>
#include <optional>
#include <set>
#include <utility>

#include "io/json_line.h"
#include "io/listener.h"
#include "pipeline/correction.h"

namespace kedge::io {

namespace {

constexpr std::size_t request_bytes_max = 4096;
constexpr std::size_t connections_max = 8;
// For a whole request, and for its answer to be taken.
constexpr std::chrono::seconds patience{10};

}  // namespace

Result<station::v1::Correction> parse_correction(std::string_view line) {
  station::v1::StationRecord record;
  const auto parsed = google::protobuf::util::JsonStringToMessage(std::string(line), &record);
  if (!parsed.ok()) {
    // The parser's text goes on with a picture of the place over several lines.
    const std::string text(parsed.message());
    return Error{
        fmt::format("this is no request: {}; one looks like {{\"correction\":{{\"tag\":\"cart-3\",\"east_m\":4,"
                    "\"north_m\":7.5,\"heading_deg\":90}}}}",
                    text.substr(0, text.find('\n')))};
  }
  if (!record.has_correction()) return Error{"only a \"correction\" is taken here"};
  if (Status status = pipeline::check_correction(record.correction()); !status) return Error{status.error()};
  return std::move(*record.mutable_correction());
}

class ControlSocket::State {
 public:
  State(asio::io_context& context, std::string path, Handler handler)
      : path_(std::move(path)),
        handler_(std::move(handler)),
        listener_(context, [this](StreamSocket socket, const auto&) { welcome(std::move(socket)); }) {}
  ~State() { close(); }
  State(const State&) = delete;
  State& operator=(const State&) = delete;

  [[nodiscard]] Status open() {
    if (Status status = listener_.open_local(path_); !status)
      return Error{fmt::format("control socket {}", status.error())};
    return {};
  }

  void close() {
    listener_.close();
    for (const auto& connection : std::exchange(connections_, {})) connection->end();
  }

 private:
  class Connection : public std::enable_shared_from_this<Connection> {
   public:
    Connection(State& server, StreamSocket socket)
        : server_(server), socket_(std::move(socket)), timer_(socket_.get_executor()) {}

    void start() {
      limit_time();
      read();
    }

    void end() {
      ended_ = true;
      asio::error_code ignored;
      socket_.close(ignored);
      timer_.cancel(ignored);
    }

   private:
    void leave() {
      end();
      server_.connections_.erase(shared_from_this());
    }

    void limit_time() {
      timer_.expires_after(patience);
      timer_.async_wait([self = shared_from_this()](const asio::error_code& error) {
        if (!error && !self->ended_ && self->timer_.expiry() <= asio::steady_timer::clock_type::now()) self->leave();
      });
    }

    // A request that came together with the last one is answered first.
    void read() {
      if (const std::size_t end = held_.find('\n'); end != std::string::npos) {
        const std::string line = held_.substr(0, end);
        held_.erase(0, end + 1);
        answer(server_.answer_to(line));
        return;
      }
      if (held_.size() > request_bytes_max) {
        last_answer_ = true;
        answer(error_line(fmt::format("the request is longer than {} bytes", request_bytes_max)));
        return;
      }
      socket_.async_read_some(asio::buffer(chunk_),
                              [self = shared_from_this()](const asio::error_code& error, std::size_t count) {
                                if (self->ended_) return;
                                if (error) {
                                  self->leave();
                                  return;
                                }
                                self->held_.append(self->chunk_.data(), count);
                                self->read();
                              });
    }

    void answer(std::string line) {
      answer_ = std::move(line);
      limit_time();
      asio::async_write(socket_, asio::buffer(answer_),
                        [self = shared_from_this()](const asio::error_code& error, std::size_t) {
                          if (self->ended_) return;
                          if (error || self->last_answer_) {
                            self->leave();
                          } else {
                            self->start();
                          }
                        });
    }

    State& server_;  // not touched once ended
    StreamSocket socket_;
    asio::steady_timer timer_;
    std::array<char, 1024> chunk_{};
    std::string held_;
    std::string answer_;
    bool last_answer_ = false;
    bool ended_ = false;
  };

  void welcome(StreamSocket socket) {
    if (connections_.size() >= connections_max) {
      const std::string line =
          error_line(fmt::format("{} operators are connected already; try again later", connections_max));
      asio::error_code ignored;
      socket.non_blocking(true, ignored);
      socket.send(asio::buffer(line), 0, ignored);
      return;
    }
    const auto connection = std::make_shared<Connection>(*this, std::move(socket));
    connections_.insert(connection);
    connection->start();
  }

  [[nodiscard]] std::string answer_to(const std::string& line) const {
    const Result<station::v1::Correction> correction = parse_correction(line);
    if (!correction) return error_line(correction.error());
    if (const Status status = handler_(*correction); !status) return error_line(status.error());
    return "{\"accepted\":true}\n";
  }

  std::string path_;
  Handler handler_;
  Listener listener_;
  std::set<std::shared_ptr<Connection>> connections_;
};

ControlSocket::ControlSocket(asio::io_context& context, std::string path, Handler handler)
    : state_(std::make_unique<State>(context, std::move(path), std::move(handler))) {}
ControlSocket::~ControlSocket() = default;

Status ControlSocket::open() { return state_->open(); }
void ControlSocket::close() { state_->close(); }

}  // namespace kedge::io
