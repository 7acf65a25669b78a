// One subscriber: connects, asks for everything as JSON lines, and hands over each line.
#pragma once

#include <array>
#include <asio/io_context.hpp>
#include <functional>
#include <string>
#include <string_view>

#include "core/result.h"
#include "io/listener.h"

namespace kedge::lookout {

/// Far above the longest message; a longer line is no feed.
inline constexpr std::size_t line_bytes_max = 1 << 20;

class FeedConnection {
 public:
  using OnLine = std::function<void(std::string_view line)>;
  /// `why` is a sentence for people.
  using OnEnd = std::function<void(const std::string& why)>;

  FeedConnection(asio::io_context& context, OnLine on_line, OnEnd on_end);

  /// Whether `where` reads as an address.
  [[nodiscard]] static Status check(const std::string& where);

  /// `where`: "127.0.0.1:47810" or "unix:/run/kedge/feed.sock". Waits for the connection; then lines come
  /// from the loop.
  [[nodiscard]] Status open(const std::string& where);
  void close();

 private:
  void read();
  void take(std::size_t count);

  io::StreamSocket socket_;
  OnLine on_line_;
  OnEnd on_end_;
  std::array<char, 65536> chunk_{};
  std::string held_;
};

}  // namespace kedge::lookout
