// Any bytes as a capture, and good captures with bytes changed: reading ends, damage is told in order and
// within the file, and what comes out of a changed capture is what was written into it.
#include <algorithm>
#include <cstdint>
#include <cstdlib>
#include <span>
#include <vector>

#include "capture/format.h"
#include "capture/sample.h"

using namespace kedge;
using namespace kedge::test;
using Bytes = std::vector<std::byte>;

namespace {

void require(bool condition) {
  if (!condition) std::abort();
}

enum class Mode : std::uint8_t { raw, changed, changed_and_sealed };
constexpr unsigned mode_count = 3;

/// Changes bytes of a good capture: two bytes of place and one of value for each.
Bytes changed(Bytes capture, std::span<const std::byte> edits) {
  for (; edits.size() >= 3; edits = edits.subspan(3)) {
    const auto place = std::to_integer<std::size_t>(edits[0]) << 8U | std::to_integer<std::size_t>(edits[1]);
    capture[place % capture.size()] = edits[2];
  }
  return capture;
}

/// Makes all checks good again, so that what lies behind them is reached.
void seal(const Bytes& good, Bytes& capture) {
  for (std::size_t at = 0; at < good.size();) {
    const auto length = capture::format::get<std::uint32_t>(good, at + 4, false);
    const auto front = std::span(capture).subspan(at, length - capture::format::block_tail);
    const std::uint32_t check = capture::format::crc32_of(front);
    std::copy_n(good.begin() + static_cast<std::ptrdiff_t>(at + front.size()), capture::format::block_tail,
                capture.begin() + static_cast<std::ptrdiff_t>(at + front.size()));
    std::memcpy(capture.data() + at + front.size() + 4, &check, sizeof(check));
    at += length;
  }
}

void check_damages(const ReadBack& back, std::size_t size) {
  std::uint64_t end = 0;
  for (const capture::Damage& damage : back.damages) {
    require(damage.offset >= end && damage.bytes_lost > 0);
    end = damage.offset + damage.bytes_lost;
    require(end <= size && !damage.reason.empty());
  }
}

/// Each record that came back was written, in this order.
void check_written(const ReadBack& back, const std::vector<Kept>& records) {
  auto from = records.begin();
  for (const Kept& record : back.records) {
    from = std::find(from, records.end(), record);
    require(from != records.end());
    ++from;
  }
}

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  if (size < 2) return 0;
  static const std::vector<Kept> records = sample_records();
  static const Bytes good = write(sample_head(), records).bytes;
  const auto mode = static_cast<Mode>(data[0] % mode_count);
  const std::size_t piece = 1 + data[1];
  const auto rest = std::as_bytes(std::span(data + 2, size - 2));
  Bytes bytes = mode == Mode::raw ? Bytes(rest.begin(), rest.end()) : changed(good, rest);
  if (mode == Mode::changed_and_sealed) seal(good, bytes);
  const ReadBack back = read(bytes, piece);
  check_damages(back, bytes.size());
  if (mode == Mode::changed) check_written(back, records);
#ifdef KEDGE_PLANTED_BUG
  // False for a capture with damage in two places.
  require(back.damages.size() < 2);
#endif
  return 0;
}
