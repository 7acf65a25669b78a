#include "wire/crc32c.h"

#include <array>

namespace kedge::wire {
namespace {

constexpr std::array<std::uint32_t, 256> make_table() {
  std::array<std::uint32_t, 256> table{};
  for (std::uint32_t byte = 0; byte < table.size(); ++byte) {
    std::uint32_t remainder = byte;
    for (int bit = 0; bit < 8; ++bit) remainder = (remainder >> 1) ^ ((remainder & 1U) != 0 ? 0x82F63B78U : 0U);
    table[byte] = remainder;
  }
  return table;
}

constexpr auto table = make_table();

}  // namespace

std::uint32_t crc32c(std::span<const std::byte> bytes) {
  std::uint32_t remainder = 0xFFFFFFFFU;
  for (const std::byte byte : bytes) {
    remainder = (remainder >> 8) ^ table[(remainder ^ std::to_integer<std::uint32_t>(byte)) & 0xFFU];
  }
  return ~remainder;
}

}  // namespace kedge::wire
