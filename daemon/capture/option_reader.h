// Goes through the options of a block.
#pragma once

#include <cstdint>
#include <span>

#include "capture/format.h"

namespace kedge::capture {

class OptionReader {
 public:
  OptionReader(std::span<const std::byte> options, bool big_endian) : left_(options), big_endian_(big_endian) {}

  /// False at the end, and where sizes do not fit.
  bool next() {
    if (left_.size() < 4) return false;
    code_ = format::get<std::uint16_t>(left_, 0, big_endian_);
    const std::size_t size = format::get<std::uint16_t>(left_, 2, big_endian_);
    const std::size_t whole = 4 + format::padded(size);
    if (whole > left_.size()) return false;
    value_ = left_.subspan(4, size);
    left_ = left_.subspan(whole);
    return true;
  }
  [[nodiscard]] std::uint16_t code() const { return code_; }
  [[nodiscard]] std::span<const std::byte> value() const { return value_; }

 private:
  std::span<const std::byte> left_;
  bool big_endian_;
  std::uint16_t code_ = 0;
  std::span<const std::byte> value_;
};

}  // namespace kedge::capture
