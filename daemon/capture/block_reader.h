// Finds the good blocks of a capture: those whose two lengths agree and whose check holds. What lies
// between them is damage, told with its place and size.
#pragma once

#include <cstdint>
#include <optional>
#include <span>

#include "capture/byte_stream.h"
#include "capture/byte_window.h"
#include "capture/damage.h"
#include "capture/format.h"

namespace kedge::capture {

struct Block {
  std::uint32_t type = 0;
  std::uint64_t offset = 0;          ///< in the file
  std::span<const std::byte> bytes;  ///< all of it, both lengths included

  /// From `at` to the check that ends every block; empty when nothing is there.
  [[nodiscard]] std::span<const std::byte> options(std::size_t at) const {
    const std::size_t end = bytes.size() - format::block_tail;
    return at < end ? bytes.subspan(at, end - at) : std::span<const std::byte>{};
  }
};

class BlockReader {
 public:
  enum class Next : std::uint8_t { block, damage, end };

  /// `source` must outlive the reader.
  explicit BlockReader(ByteSource& source) : window_(source) {}

  /// The first bytes of the source, fewer than `count` only where it is shorter. Before any next().
  std::span<const std::byte> front(std::size_t count);
  /// The bytes of `block` stay valid until the next call. While no good block was seen, looks for one
  /// in the first search_bytes_max bytes only, then says end.
  Next next(Block& block);
  /// Gives up the block that next() returned last and all that follows.
  Damage lose_rest(std::string reason);

  [[nodiscard]] const Damage& damage() const { return damage_; }
  /// Whether any good block was seen.
  [[nodiscard]] bool any_good() const { return big_endian_.has_value(); }
  /// Precondition: any_good().
  [[nodiscard]] bool big_endian() const { return *big_endian_; }
  /// Why the source ended before its time; empty: it did not.
  [[nodiscard]] const std::string& failure() const { return window_.failure(); }

  static constexpr std::uint64_t search_bytes_max = 2 * format::section_bytes_max;

 private:
  struct Look;

  Look look();
  Look look(bool big_endian);
  void skip_to_good_block();
  Damage lose(std::uint64_t from, std::string reason) const;

  ByteWindow window_;
  std::optional<bool> big_endian_;
  std::size_t taken_ = 0;  // bytes of the block returned last
  bool failure_told_ = false;
  Damage damage_;
};

}  // namespace kedge::capture
