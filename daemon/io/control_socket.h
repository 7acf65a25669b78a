// The operator's word: a local socket that takes corrections while the daemon runs.
//
// One JSON line per request, {"correction":{...}} with the fields of station.v1.Correction (also those in
// protobuf JSON's lowerCamelCase), one JSON line per answer: {"accepted":true} or {"error":"..."}. A connection may
// ask several times. See proto/README.md.
#pragma once

#include <asio/io_context.hpp>
#include <functional>
#include <memory>
#include <string>
#include <string_view>

#include "core/result.h"
#include "proto/station.pb.h"

namespace kedge::io {

/// The correction in one request line, or why it is none: every number finite, east and north together, at
/// least one of position and heading, standard deviations positive. Whether the tag is known is not checked.
[[nodiscard]] Result<station::v1::Correction> parse_correction(std::string_view line);

class ControlSocket {
 public:
  /// Takes a correction that parse_correction accepted; its error becomes the answer.
  using Handler = std::function<Status(const station::v1::Correction&)>;

  ControlSocket(asio::io_context& context, std::string path, Handler handler);
  ~ControlSocket();
  ControlSocket(const ControlSocket&) = delete;
  ControlSocket& operator=(const ControlSocket&) = delete;

  /// Mode 0660. An existing socket is replaced only if no one listens on it.
  [[nodiscard]] Status open();
  /// Also removes the socket's file; also done by the destructor.
  void close();

 private:
  class State;
  std::unique_ptr<State> state_;
};

}  // namespace kedge::io
