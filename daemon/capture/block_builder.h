// Builds one block in a reused buffer, little-endian: fixed part, options, and the check that ends it.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string_view>
#include <type_traits>
#include <vector>

#include "capture/format.h"

namespace kedge::capture {

class BlockBuilder {
 public:
  /// Starts anew in `buffer`, which must outlive the builder.
  BlockBuilder(std::vector<std::byte>& buffer, std::uint32_t type) : out_(buffer) {
    out_.clear();
    put(type);
    put(std::uint32_t{0});  // the length, known at the end
  }

  template <class T>
  void put(T value) {
    static_assert(std::is_unsigned_v<T>);
    set(grow(sizeof(T)), value);
  }
  void pad() { out_.resize(format::padded(out_.size())); }
  void option(std::uint16_t code, std::span<const std::byte> value) {
    put(code);
    put(static_cast<std::uint16_t>(value.size()));
    out_.insert(out_.end(), value.begin(), value.end());
    pad();
  }
  void option(std::uint16_t code, std::string_view text) { option(code, std::as_bytes(std::span(text))); }

  /// The whole block.
  std::span<const std::byte> finish() {
    const auto length = static_cast<std::uint32_t>(out_.size() + format::block_tail);
    set(4, length);
    const std::uint32_t check = format::crc32_of(out_);
    put(format::option_check);
    put(std::uint16_t{4});
    put(check);
    put(std::uint32_t{format::option_end});
    put(length);
    return out_;
  }

 private:
  std::size_t grow(std::size_t size) {
    const std::size_t at = out_.size();
    out_.resize(at + size);
    return at;
  }
  template <class T>
  void set(std::size_t at, T value) {
    std::memcpy(out_.data() + at, &value, sizeof(T));
  }

  std::vector<std::byte>& out_;
};

}  // namespace kedge::capture
