#include "wire/cobs.h"

#include "core/assert.h"

namespace kedge::wire {
namespace {

// A code byte says how far it is to the next one; the greatest stands for a run without a zero after it.
constexpr std::size_t code_max = 0xFF;

}  // namespace

std::size_t cobs_encode(std::span<const std::byte> bytes, std::span<std::byte> out) {
  KEDGE_ASSERT(out.size() >= cobs_encoded_max(bytes.size()));
  std::size_t code_at = 0;
  std::size_t end = 1;
  const auto close_run = [&] {
    out[code_at] = static_cast<std::byte>(end - code_at);
    code_at = end++;
  };
  for (std::size_t i = 0; i < bytes.size(); ++i) {
    if (bytes[i] != std::byte{0}) out[end++] = bytes[i];
    const bool full = end - code_at == code_max;
    // A full run that is also the last needs no empty run behind it.
    if (bytes[i] == std::byte{0} || (full && i + 1 < bytes.size())) close_run();
  }
  out[code_at] = static_cast<std::byte>(end - code_at);
  return end;
}

std::optional<std::size_t> cobs_decode(std::span<const std::byte> encoded, std::span<std::byte> out) {
  KEDGE_ASSERT(out.size() >= encoded.size());
  if (encoded.empty()) return std::nullopt;
  std::size_t end = 0;
  std::size_t at = 0;
  while (at < encoded.size()) {
    const auto code = std::to_integer<std::size_t>(encoded[at]);
    if (code == 0 || code > encoded.size() - at) return std::nullopt;
    for (std::size_t i = 1; i < code; ++i) {
      if (encoded[at + i] == std::byte{0}) return std::nullopt;
      out[end++] = encoded[at + i];
    }
    at += code;
    if (code != code_max && at < encoded.size()) out[end++] = std::byte{0};
  }
  return end;
}

}  // namespace kedge::wire
