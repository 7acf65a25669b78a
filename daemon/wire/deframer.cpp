#include "wire/deframer.h"

#include "wire/crc32c.h"

namespace kedge::wire {

void Deframer::hold(std::span<const std::byte> bytes) {
  if (held_ == too_long) {
    counters_.bytes_dropped += bytes.size();
    return;
  }
  if (bytes.size() > frame_bytes_max - held_) {
    drop(counters_.oversize, held_ + bytes.size());
    held_ = too_long;
    return;
  }
  std::copy(bytes.begin(), bytes.end(), bytes_.begin() + static_cast<std::ptrdiff_t>(held_));
  held_ += bytes.size();
}

std::optional<std::span<const std::byte>> Deframer::finish() {
  const std::size_t held = held_;
  held_ = 0;
  if (held == 0) return std::nullopt;
  if (held == too_long) {
    ++counters_.bytes_dropped;
    return std::nullopt;
  }
  const std::span frame(bytes_.data(), held);
  const auto size = cobs_decode(frame, bytes_);
  if (!size || *size <= frame_check_bytes) {
    drop(counters_.malformed, held + 1);
    return std::nullopt;
  }
  const std::span<const std::byte> datagram(bytes_.data(), *size - frame_check_bytes);
  std::uint32_t check = 0;
  for (std::size_t i = 0; i < frame_check_bytes; ++i) {
    check |= std::to_integer<std::uint32_t>(bytes_[datagram.size() + i]) << (8 * i);
  }
  if (check != crc32c(datagram)) {
    drop(counters_.crc_failures, held + 1);
    return std::nullopt;
  }
  ++counters_.frames;
  return datagram;
}

void Deframer::drop(std::uint64_t& cause, std::size_t bytes) {
  ++cause;
  counters_.bytes_dropped += bytes;
}

}  // namespace kedge::wire
