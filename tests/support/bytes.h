// Bytes as people write them: hex in, hex out.
#pragma once

#include <cstddef>
#include <span>
#include <string>
#include <string_view>
#include <vector>

namespace kedge::test {

/// "03 11 22" or "031122"; anything else is a mistake of the test.
inline std::vector<std::byte> from_hex(std::string_view text) {
  std::string digits;
  for (const char c : text) {
    if (c != ' ' && c != '\n') digits.push_back(c);
  }
  std::vector<std::byte> bytes;
  for (std::size_t i = 0; i + 1 < digits.size(); i += 2) {
    bytes.push_back(static_cast<std::byte>(std::stoi(digits.substr(i, 2), nullptr, 16)));
  }
  return bytes;
}

inline std::string to_hex(std::span<const std::byte> bytes) {
  constexpr std::string_view digit = "0123456789ABCDEF";
  std::string text;
  for (const std::byte byte : bytes) {
    const auto value = std::to_integer<unsigned>(byte);
    if (!text.empty()) text += ' ';
    text += digit[value / 16];
    text += digit[value % 16];
  }
  return text;
}

}  // namespace kedge::test
