// The short answers of our sockets: one JSON object, one line.
#pragma once

#include <string>
#include <string_view>

namespace kedge::io {

/// `text` as a JSON string with its quotes (RFC 8259). Bytes that are no UTF-8 become '?'.
[[nodiscard]] std::string json_quoted(std::string_view text);

/// {"error":"..."} and a line feed.
[[nodiscard]] std::string error_line(std::string_view text);

}  // namespace kedge::io
