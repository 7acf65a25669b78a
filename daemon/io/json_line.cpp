#include "io/json_line.h"

#include <fmt/core.h>

#include <cstddef>

namespace kedge::io {

namespace {

// Length of the UTF-8 character at the front of `text`, 0 if there is none (RFC 3629, section 4).
std::size_t utf8_length(std::string_view text) {
  const auto byte = [&](std::size_t i) { return i < text.size() ? static_cast<unsigned char>(text[i]) : 0U; };
  const auto tail = [&](std::size_t i) { return (byte(i) & 0xC0U) == 0x80U; };
  const unsigned b0 = byte(0);
  const unsigned b1 = byte(1);
  if (b0 < 0x80) return 1;
  if (b0 >= 0xC2 && b0 <= 0xDF) return tail(1) ? 2 : 0;
  if (b0 >= 0xE0 && b0 <= 0xEF) {
    // No overlong forms, no halves of surrogate pairs.
    const bool first_ok = (b0 != 0xE0 || b1 >= 0xA0) && (b0 != 0xED || b1 <= 0x9F);
    return first_ok && tail(1) && tail(2) ? 3 : 0;
  }
  if (b0 >= 0xF0 && b0 <= 0xF4) {
    const bool first_ok = (b0 != 0xF0 || b1 >= 0x90) && (b0 != 0xF4 || b1 <= 0x8F);
    return first_ok && tail(1) && tail(2) && tail(3) ? 4 : 0;
  }
  return 0;
}

}  // namespace

std::string json_quoted(std::string_view text) {
  std::string quoted = "\"";
  while (!text.empty()) {
    const std::size_t length = utf8_length(text);
    const char c = text.front();
    if (length == 0) {
      quoted += '?';
    } else if (c == '"' || c == '\\') {
      quoted += '\\';
      quoted += c;
    } else if (length == 1 && static_cast<unsigned char>(c) < 0x20) {
      quoted += fmt::format("\\u{:04x}", static_cast<unsigned>(c));
    } else {
      quoted += text.substr(0, length);
    }
    text.remove_prefix(length == 0 ? 1 : length);
  }
  quoted += '"';
  return quoted;
}

std::string error_line(std::string_view text) { return fmt::format("{{\"error\":{}}}\n", json_quoted(text)); }

}  // namespace kedge::io
