#include "capture/block_reader.h"

#include <fmt/core.h>

namespace kedge::capture {

namespace {

struct Bounds {
  std::size_t least = 0;
  std::size_t most = 0;
};

Bounds length_bounds(std::uint32_t type) {
  switch (type) {
    case format::section_header:
      return {format::section_fixed + format::block_tail, format::section_bytes_max};
    case format::interface_description:
      return {format::interface_fixed + format::block_tail, format::interface_bytes_max};
    case format::enhanced_packet:
      return {format::packet_fixed + format::block_tail, format::packet_bytes_max};
    default:
      return {8 + format::block_tail, format::packet_bytes_max};
  }
}

bool check_holds(std::span<const std::byte> block, bool big_endian) {
  const std::size_t at = block.size() - format::block_tail;
  return format::get<std::uint16_t>(block, at, big_endian) == format::option_check &&
         format::get<std::uint16_t>(block, at + 2, big_endian) == 4 &&
         format::get<std::uint32_t>(block, at + 8, big_endian) == format::option_end &&
         format::get<std::uint32_t>(block, at + 4, big_endian) == format::crc32_of(block.first(at));
}

bool may_begin(std::span<const std::byte> bytes) {
  // Either byte order: the types have one byte that is not zero. A section header is looked for at the
  // start of the file alone: it may be large, and hashing every likeness of one would take for ever.
  const auto at = [&](std::size_t i) { return std::to_integer<unsigned>(bytes[i]); };
  const auto is_type = [](unsigned low) {
    return low == format::interface_description || low == format::enhanced_packet;
  };
  return at(1) == 0 && at(2) == 0 && ((is_type(at(0)) && at(3) == 0) || (at(0) == 0 && is_type(at(3))));
}

}  // namespace

// What seems to stand at the front of the window.
struct BlockReader::Look {
  std::uint32_t type = 0;
  std::size_t length = 0;  // 0: cannot be a block
  bool whole = false;      // both lengths are there and agree
  bool good = false;       // and the check holds
  bool big_endian = false;
};

BlockReader::Look BlockReader::look(bool big_endian) {
  Look seen;
  seen.big_endian = big_endian;
  if (!window_.have(8)) return seen;
  seen.type = format::get<std::uint32_t>(window_.view(), 0, big_endian);
  const std::size_t length = format::get<std::uint32_t>(window_.view(), 4, big_endian);
  const Bounds bounds = length_bounds(seen.type);
  if (length % 4 != 0 || length < bounds.least || length > bounds.most) return seen;
  seen.length = length;
  if (!window_.have(length)) return seen;
  const auto block = window_.view().first(length);
  seen.whole = format::get<std::uint32_t>(block, length - 4, big_endian) == length;
  seen.good = seen.whole && check_holds(block, big_endian);
  return seen;
}

BlockReader::Look BlockReader::look() {
  if (big_endian_) return look(*big_endian_);
  const Look little = look(false);
  if (little.whole) return little;
  const Look big = look(true);
  return big.whole ? big : little;
}

std::span<const std::byte> BlockReader::front(std::size_t count) {
  window_.have(count);
  return window_.view().first(std::min(count, window_.view().size()));
}

BlockReader::Next BlockReader::next(Block& block) {
  window_.drop(taken_);
  taken_ = 0;
  if (!window_.have(1)) {
    if (failure().empty() || failure_told_) return Next::end;
    failure_told_ = true;
    damage_ = {window_.offset(), 0, failure()};
    return Next::damage;
  }
  const std::uint64_t from = window_.offset();
  const Look seen = look();
  if (seen.good) {
    big_endian_ = seen.big_endian;
    taken_ = seen.length;
    block = {seen.type, from, window_.view().first(seen.length)};
    return Next::block;
  }
  if (!any_good() && from >= search_bytes_max) return Next::end;
  if (seen.whole) {
    // Trusting the lengths here keeps the search out of the block's own bytes, where a datagram might
    // hold something that looks like a block.
    window_.drop(seen.length);
    damage_ = lose(from, "a block whose check fails");
    return Next::damage;
  }
  const bool beyond_end = window_.view().size() < 8 || (seen.length > 0 && !window_.have(seen.length));
  skip_to_good_block();
  const bool cut = beyond_end && !window_.have(1);
  const std::string_view size = seen.length > 0 ? "a block of {} bytes" : "a block";
  damage_ = lose(from, cut ? "the file ends within " + fmt::format(fmt::runtime(size), seen.length)
                           : "no block, or one whose length is damaged");
  return Next::damage;
}

void BlockReader::skip_to_good_block() {
  do {
    if (!any_good() && window_.offset() >= search_bytes_max) return;
    window_.drop(1);
  } while (window_.have(4) && !(may_begin(window_.view()) && look().good));
  if (!window_.have(4)) window_.drop(window_.view().size());
}

Damage BlockReader::lose(std::uint64_t from, std::string reason) const {
  return {from, window_.offset() - from, std::move(reason)};
}

Damage BlockReader::lose_rest(std::string reason) {
  const std::uint64_t from = window_.offset();
  taken_ = 0;
  while (window_.have(1)) window_.drop(window_.view().size());
  return lose(from, std::move(reason));
}

}  // namespace kedge::capture
