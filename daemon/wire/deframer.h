// Finds the datagrams in a serial byte stream.
//
// A frame is COBS(datagram, CRC-32C little-endian) and a zero byte; proto/README.md has the table. A
// zero occurs nowhere else, so whatever noise came before, the stream is in step again after the next
// zero. The bytes held between two chunks are state of the engine.
#pragma once

#include <algorithm>
#include <array>
#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>

#include "wire/limits.h"

namespace kedge::wire {

struct DeframerCounters {
  std::uint64_t frames = 0;         ///< good ones
  std::uint64_t crc_failures = 0;   ///< frames whose check differs
  std::uint64_t malformed = 0;      ///< frames that are no COBS, or hold no datagram
  std::uint64_t oversize = 0;       ///< runs of more than frame_bytes_max without a zero
  std::uint64_t bytes_dropped = 0;  ///< in all of these, their zeros included

  template <class Archive>
  void fields(Archive& archive) {
    archive(frames, crc_failures, malformed, oversize, bytes_dropped);
  }
};

class Deframer {
 public:
  /// Takes the next bytes of the stream, in chunks of any size, and calls
  /// sink(std::span<const std::byte> datagram) for every good frame that ends in them. The span is
  /// valid during the call only. Empty frames (two zeros in a row) are passed over in silence.
  template <class Sink>
  void push(std::span<const std::byte> chunk, Sink&& sink) {
    while (!chunk.empty()) {
      const auto zero = std::find(chunk.begin(), chunk.end(), std::byte{0});
      hold(std::span<const std::byte>(chunk.begin(), zero));
      if (zero == chunk.end()) return;
      chunk = std::span<const std::byte>(zero + 1, chunk.end());
      if (const auto datagram = finish()) sink(*datagram);
    }
  }

  [[nodiscard]] const DeframerCounters& counters() const { return counters_; }

  /// State visitor, see core/archive.h.
  template <class Archive>
  void fields(Archive& archive) {
    std::size_t held = held_;
    archive(held, counters_);
    if constexpr (Archive::loading) {
      held_ = 0;
      if (held > too_long) {
        archive.fail();
        return;
      }
      held_ = held;
    }
    for (std::size_t i = 0; i < std::min(held_, frame_bytes_max); ++i) archive(bytes_[i]);
  }

 private:
  static constexpr std::size_t too_long = frame_bytes_max + 1;

  void hold(std::span<const std::byte> bytes);
  /// At a zero: the datagram of the held frame, or nothing.
  std::optional<std::span<const std::byte>> finish();
  void drop(std::uint64_t& cause, std::size_t bytes);

  std::array<std::byte, frame_bytes_max> bytes_{};
  std::size_t held_ = 0;  ///< too_long: an oversize frame is being passed over
  DeframerCounters counters_;
};

}  // namespace kedge::wire
