#include "lookout/feed_connection.h"

#include <fmt/core.h>

#include <asio/ip/tcp.hpp>
#include <asio/local/stream_protocol.hpp>
#include <asio/write.hpp>
#include <utility>

#include "config/address.h"

namespace kedge::lookout {

namespace {

using Endpoint = asio::generic::stream_protocol::endpoint;

Result<Endpoint> endpoint_of(const std::string& where) {
  constexpr std::string_view unix_prefix = "unix:";
  if (where.starts_with(unix_prefix)) {
    const std::string path = where.substr(unix_prefix.size());
    if (path.empty() || path.size() > 107)
      return Error{fmt::format("is \"{}\"; the path of a socket has 1 to 107 bytes", where)};
    return Endpoint(asio::local::stream_protocol::endpoint(path));
  }
  const Result<config::HostPort> tcp = config::parse_host_port(where);
  if (!tcp) return Error{fmt::format("{}, or unix: and a path", tcp.error())};
  return Endpoint(asio::ip::tcp::endpoint(asio::ip::make_address(tcp->host), tcp->port));
}

}  // namespace

FeedConnection::FeedConnection(asio::io_context& context, OnLine on_line, OnEnd on_end)
    : socket_(context), on_line_(std::move(on_line)), on_end_(std::move(on_end)) {}

Status FeedConnection::check(const std::string& where) {
  const Result<Endpoint> endpoint = endpoint_of(where);
  return endpoint ? Status{} : Status{Error{endpoint.error()}};
}

Status FeedConnection::open(const std::string& where) {
  const Result<Endpoint> endpoint = endpoint_of(where);
  if (!endpoint) return Error{endpoint.error()};
  asio::error_code error;
  socket_.connect(*endpoint, error);
  if (error) return Error{fmt::format("{}: {}; is kedged running, and is its feed there?", where, error.message())};
  asio::write(socket_, asio::buffer(std::string_view("{\"subscribe\":{}}\n")), error);
  if (error) return Error{fmt::format("{}: {}", where, error.message())};
  read();
  return {};
}

void FeedConnection::close() {
  asio::error_code ignored;
  socket_.close(ignored);
}

void FeedConnection::read() {
  socket_.async_read_some(asio::buffer(chunk_), [this](const asio::error_code& error, std::size_t count) {
    if (error == asio::error::operation_aborted) return;
    if (error) {
      on_end_(error == asio::error::eof ? "the station ended the feed" : error.message());
      return;
    }
    take(count);
  });
}

void FeedConnection::take(std::size_t count) {
  held_.append(chunk_.data(), count);
  std::size_t begin = 0;
  for (std::size_t end = 0; (end = held_.find('\n', begin)) != std::string::npos; begin = end + 1) {
    on_line_(std::string_view(held_).substr(begin, end - begin));
    if (!socket_.is_open()) return;
  }
  held_.erase(0, begin);
  if (held_.size() > line_bytes_max) {
    on_end_(fmt::format("a line of more than {} bytes came: this is no feed", line_bytes_max));
    return;
  }
  read();
}

}  // namespace kedge::lookout
