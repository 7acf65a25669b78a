// A plain client of a stream socket, written on the system's calls alone: what a stranger's program would do.
#pragma once

#include <arpa/inet.h>
#include <fcntl.h>
#include <netinet/in.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>

#include <cerrno>
#include <cstdint>
#include <cstring>
#include <string>
#include <string_view>
#include <utility>

namespace kedge::test {

class SocketClient {
 public:
  /// 127.0.0.1; receive_buffer_bytes 0 leaves the system's.
  static SocketClient tcp(std::uint16_t port, int receive_buffer_bytes = 0) {
    sockaddr_in to{};
    to.sin_family = AF_INET;
    to.sin_port = htons(port);
    to.sin_addr.s_addr = htonl(INADDR_LOOPBACK);
    return SocketClient(AF_INET, &to, sizeof(to), receive_buffer_bytes);
  }
  static SocketClient local(const std::string& path) {
    sockaddr_un to{};
    to.sun_family = AF_UNIX;
    std::strncpy(to.sun_path, path.c_str(), sizeof(to.sun_path) - 1);
    return SocketClient(AF_UNIX, &to, sizeof(to), 0);
  }
  SocketClient(SocketClient&& other) noexcept
      : fd_(std::exchange(other.fd_, -1)), ended_(other.ended_), reset_(other.reset_), text_(std::move(other.text_)) {}
  SocketClient(const SocketClient&) = delete;
  SocketClient& operator=(const SocketClient&) = delete;
  SocketClient& operator=(SocketClient&&) = delete;
  ~SocketClient() { close(); }

  [[nodiscard]] bool connected() const { return fd_ >= 0; }

  /// How many bytes the system took; fewer where it would have to wait, 0 after a reset.
  std::size_t send(std::string_view bytes) const {
    const ssize_t count = ::send(fd_, bytes.data(), bytes.size(), MSG_DONTWAIT | MSG_NOSIGNAL);
    return count < 0 ? 0 : static_cast<std::size_t>(count);
  }
  void end_sending() const { ::shutdown(fd_, SHUT_WR); }
  void close() {
    if (fd_ >= 0) ::close(std::exchange(fd_, -1));
  }

  /// Everything that has come so far.
  const std::string& text() {
    char chunk[65536];
    while (!ended_) {
      const ssize_t count = ::recv(fd_, chunk, sizeof(chunk), MSG_DONTWAIT);
      if (count > 0) {
        text_.append(chunk, static_cast<std::size_t>(count));
        continue;
      }
      if (count < 0 && errno == EAGAIN) break;
      ended_ = true;
      reset_ = count < 0;
    }
    return text_;
  }
  /// The other side has ended the connection.
  bool ended() {
    text();
    return ended_;
  }
  /// ... and not in an orderly way.
  [[nodiscard]] bool reset() const { return reset_; }

  [[nodiscard]] std::size_t lines() {
    std::size_t count = 0;
    for (const char c : text()) count += c == '\n' ? 1 : 0;
    return count;
  }

 private:
  SocketClient(int family, const void* to, socklen_t size, int receive_buffer_bytes)
      : fd_(::socket(family, SOCK_STREAM | SOCK_CLOEXEC, 0)) {
    if (receive_buffer_bytes > 0) {
      ::setsockopt(fd_, SOL_SOCKET, SO_RCVBUF, &receive_buffer_bytes, sizeof(receive_buffer_bytes));
    }
    if (::connect(fd_, static_cast<const sockaddr*>(to), size) != 0) close();
  }

  int fd_;
  bool ended_ = false;
  bool reset_ = false;
  std::string text_;
};

}  // namespace kedge::test
