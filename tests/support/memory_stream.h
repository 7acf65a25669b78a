// Captures in memory, for tests: a sink that can be told to refuse, and a source that hands out small pieces.
#pragma once

#include <algorithm>
#include <cstddef>
#include <span>
#include <vector>

#include "capture/byte_stream.h"

namespace kedge::test {

class MemorySink final : public capture::ByteSink {
 public:
  Status write(std::span<const std::byte> bytes) override {
    if (bytes.size() > room) return Error{"no room"};
    room -= bytes.size();
    held.insert(held.end(), bytes.begin(), bytes.end());
    return {};
  }
  Status flush() override { return {}; }

  std::vector<std::byte> held;
  std::size_t room = SIZE_MAX;
};

class MemorySource final : public capture::ByteSource {
 public:
  explicit MemorySource(std::span<const std::byte> bytes, std::size_t piece = SIZE_MAX) : left_(bytes), piece_(piece) {}

  Result<std::size_t> read(std::span<std::byte> room) override {
    const std::size_t size = std::min({room.size(), left_.size(), piece_});
    std::copy_n(left_.begin(), size, room.begin());
    left_ = left_.subspan(size);
    return size;
  }

 private:
  std::span<const std::byte> left_;
  std::size_t piece_;
};

}  // namespace kedge::test
