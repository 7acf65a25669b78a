// Messages as bytes, in the two encodings a client can choose from.
//
// The JSON line is also the canonical form of a message file. It follows the Protocol Buffers JSON
// mapping with the field names of the proto; zero values are written, unknown ones are absent, 64-bit
// integers are strings, enumerations are words.
#pragma once

#include <array>
#include <cstdint>
#include <memory>
#include <string>

#include "proto/feed.pb.h"

namespace kedge::feed {

enum class Encoding : std::uint8_t { json, delimited };

/// json: one object and a line feed. delimited: the length as a varint, then the message.
[[nodiscard]] std::string encode(const v1::Message& message, Encoding encoding);

using SharedBytes = std::shared_ptr<const std::string>;

/// One message on its way to many subscribers: encoded at most once in each encoding, the bytes
/// shared. Not for several threads at a time.
class EncodedMessage {
 public:
  explicit EncodedMessage(const v1::Message& message) : message_(message) {}

  [[nodiscard]] const v1::Message& message() const { return message_; }
  [[nodiscard]] const SharedBytes& bytes(Encoding encoding);

 private:
  v1::Message message_;
  std::array<SharedBytes, 2> bytes_;
};

}  // namespace kedge::feed
