// The check that guards a serial frame: CRC-32C (Castagnoli), reflected polynomial 0x82F63B78, start
// and final inversion, as in RFC 3720. Detects every burst up to 32 bits.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>

namespace kedge::wire {

[[nodiscard]] std::uint32_t crc32c(std::span<const std::byte> bytes);

}  // namespace kedge::wire
