#include "io/listener.h"

#include <fmt/core.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>

#include <asio/basic_socket_acceptor.hpp>
#include <asio/ip/tcp.hpp>
#include <asio/local/stream_protocol.hpp>
#include <asio/steady_timer.hpp>
#include <cerrno>
#include <chrono>
#include <cstring>
#include <utility>

#include "io/system_text.h"

namespace kedge::io {

namespace {

using Local = asio::local::stream_protocol;
using Acceptor = asio::basic_socket_acceptor<asio::generic::stream_protocol>;

// After a failed accept (no descriptor free, say).
constexpr std::chrono::milliseconds accept_pause{100};

// Makes room at `path`: removes a socket that no one listens on.
Status clear_stale(asio::io_context& context, const std::string& path) {
  struct stat there {};
  if (::lstat(path.c_str(), &there) != 0) {
    if (errno == ENOENT) return {};
    return Error{fmt::format("{}: {}", path, system_text(errno))};
  }
  if (!S_ISSOCK(there.st_mode)) {
    return Error{fmt::format("{}: exists and is not a socket; remove it or choose another path", path)};
  }
  Local::socket probe(context);
  asio::error_code error;
  probe.open(Local(), error);
  // Without waiting: a listener whose queue is full is a listener.
  if (!error) probe.non_blocking(true, error);
  if (!error) probe.connect(Local::endpoint(path), error);
  if (error != asio::error::connection_refused) {
    return Error{fmt::format("{}: another program listens there; stop it or choose another path", path)};
  }
  if (::unlink(path.c_str()) != 0 && errno != ENOENT) {
    return Error{fmt::format("{}: cannot remove the socket of a program that ended: {}", path, system_text(errno))};
  }
  return {};
}

}  // namespace

class Listener::State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& context, OnClient on_client)
      : context_(context), acceptor_(context), pause_(context), on_client_(std::move(on_client)) {}

  [[nodiscard]] Status open_tcp(const config::HostPort& where) {
    asio::error_code error;
    const asio::ip::address address = asio::ip::make_address(where.host, error);
    const asio::ip::tcp::endpoint endpoint(address, where.port);
    if (!error) acceptor_.open(endpoint.protocol(), error);
    if (!error) acceptor_.set_option(asio::socket_base::reuse_address(true), error);
    if (!error) acceptor_.bind(endpoint, error);
    if (!error) acceptor_.listen(asio::socket_base::max_listen_connections, error);
    if (error) {
      close();
      return Error{
          fmt::format("{} port {}/tcp: cannot listen: {}{}", where.host, where.port, error.message(),
                      error == asio::error::address_in_use ? "; stop the other program or choose another port" : "")};
    }
    name_.clear();
    begin();
    return {};
  }

  [[nodiscard]] Status open_local(const std::string& path) {
    constexpr std::size_t path_bytes_max = sizeof(sockaddr_un::sun_path) - 1;
    if (path.empty() || path.size() > path_bytes_max) {
      return Error{
          fmt::format("{}: the path of a socket has 1 to {} bytes, this one {}", path, path_bytes_max, path.size())};
    }
    if (Status clear = clear_stale(context_, path); !clear) return clear;
    asio::error_code error;
    acceptor_.open(Local(), error);
    if (!error) acceptor_.bind(Local::endpoint(path), error);
    if (error) {
      close();
      return Error{
          fmt::format("{}: cannot make the socket: {}; its folder must exist and be writable", path, error.message())};
    }
    struct stat made {};
    // Nobody can connect between bind and listen, so nobody slips in before the mode is set.
    if (::chmod(path.c_str(), 0660) != 0 || ::lstat(path.c_str(), &made) != 0) {
      error.assign(errno, asio::error::get_system_category());
    } else {
      path_ = path;
      device_ = made.st_dev;
      inode_ = made.st_ino;
      acceptor_.listen(asio::socket_base::max_listen_connections, error);
    }
    if (error) {
      close();
      return Error{fmt::format("{}: cannot listen: {}", path, error.message())};
    }
    name_ = path;
    begin();
    return {};
  }

  void close() {
    closed_ = true;
    asio::error_code ignored;
    acceptor_.close(ignored);
    pause_.cancel(ignored);
    struct stat there {};
    if (!path_.empty() && ::lstat(path_.c_str(), &there) == 0 && there.st_dev == device_ && there.st_ino == inode_) {
      ::unlink(path_.c_str());
    }
    path_.clear();
  }

  [[nodiscard]] std::uint16_t port() const {
    asio::error_code error;
    const auto endpoint = acceptor_.local_endpoint(error);
    return error ? std::uint16_t{0} : tcp_endpoint(endpoint).port();
  }

 private:
  // Port 0 where the family is not of the internet.
  [[nodiscard]] static asio::ip::tcp::endpoint tcp_endpoint(const asio::generic::stream_protocol::endpoint& endpoint) {
    asio::ip::tcp::endpoint tcp;
    const int family = endpoint.protocol().family();
    if ((family == AF_INET || family == AF_INET6) && endpoint.size() <= tcp.capacity()) {
      std::memcpy(tcp.data(), endpoint.data(), endpoint.size());
    }
    return tcp;
  }

  void begin() {
    closed_ = false;
    accept();
  }

  void accept() {
    acceptor_.async_accept([self = shared_from_this()](const asio::error_code& error, StreamSocket socket) {
      if (self->closed_) return;
      if (error) {
        self->accept_later();
        return;
      }
      self->welcome(std::move(socket));
      if (!self->closed_) self->accept();
    });
  }

  void welcome(StreamSocket socket) {
    std::string peer = name_;
    if (peer.empty()) {
      asio::error_code error;
      const auto endpoint = tcp_endpoint(socket.remote_endpoint(error));
      peer = endpoint.address().is_v6() ? fmt::format("[{}]:{}", endpoint.address().to_string(), endpoint.port())
                                        : fmt::format("{}:{}", endpoint.address().to_string(), endpoint.port());
    }
    on_client_(std::move(socket), peer);
  }

  void accept_later() {
    pause_.expires_after(accept_pause);
    pause_.async_wait([self = shared_from_this()](const asio::error_code& error) {
      if (!error && !self->closed_) self->accept();
    });
  }

  asio::io_context& context_;
  Acceptor acceptor_;
  asio::steady_timer pause_;
  OnClient on_client_;
  std::string name_;
  std::string path_;  // of the file to remove
  dev_t device_ = 0;
  ino_t inode_ = 0;
  bool closed_ = true;
};

Listener::Listener(asio::io_context& context, OnClient on_client)
    : state_(std::make_shared<State>(context, std::move(on_client))) {}
Listener::~Listener() { close(); }

Status Listener::open_tcp(const config::HostPort& where) { return state_->open_tcp(where); }
Status Listener::open_local(const std::string& path) { return state_->open_local(path); }
void Listener::close() { state_->close(); }
std::uint16_t Listener::port() const { return state_->port(); }

}  // namespace kedge::io
