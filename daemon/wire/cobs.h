// Consistent Overhead Byte Stuffing: bytes without a zero in them, so that a zero can end a frame.
// Source: Cheshire and Baker, IEEE/ACM Transactions on Networking 7(2), 1999.
#pragma once

#include <cstddef>
#include <optional>
#include <span>

namespace kedge::wire {

/// Most that cobs_encode makes of `size` bytes, the ending zero not counted.
constexpr std::size_t cobs_encoded_max(std::size_t size) { return size + size / 254 + 1; }

/// Writes the encoding of `bytes` to `out` without the ending zero; returns its length.
/// Precondition: out holds cobs_encoded_max(bytes.size()), and the two do not overlap.
[[nodiscard]] std::size_t cobs_encode(std::span<const std::byte> bytes, std::span<std::byte> out);

/// Decodes one frame, its ending zero left out. Returns the length, which is below encoded.size(), or
/// nothing if this is no encoding. `out` holds encoded.size() and may be the same memory.
[[nodiscard]] std::optional<std::size_t> cobs_decode(std::span<const std::byte> encoded, std::span<std::byte> out);

}  // namespace kedge::wire
