// A movable view into a source that may be longer than memory: bytes are fetched as they are needed
// and forgotten once dropped.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "capture/byte_stream.h"

namespace kedge::capture {

class ByteWindow {
 public:
  /// `source` must outlive the window.
  explicit ByteWindow(ByteSource& source) : source_(&source) {}

  /// Fetches until `count` bytes are in view; false when the source ends before. Memory grows with what
  /// has really come, never with `count`. Invalidates earlier views.
  bool have(std::size_t count);
  /// All bytes in view.
  [[nodiscard]] std::span<const std::byte> view() const { return std::span(buffer_).subspan(begin_, end_ - begin_); }
  /// Forgets the first `count` bytes in view; earlier views stay valid until the next have().
  void drop(std::size_t count);
  /// Place of the first byte in view, from the start of the source.
  [[nodiscard]] std::uint64_t offset() const { return offset_; }
  /// Why the source ended before its time; empty: it did not.
  [[nodiscard]] const std::string& failure() const { return failure_; }

 private:
  ByteSource* source_;
  std::vector<std::byte> buffer_;
  std::size_t begin_ = 0;
  std::size_t end_ = 0;
  std::uint64_t offset_ = 0;
  bool ended_ = false;
  std::string failure_;
};

}  // namespace kedge::capture
