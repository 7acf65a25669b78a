// A capture on disk. Here and in file_source.h the room touches files; everything else works on bytes.
#pragma once

#include <cstdint>
#include <filesystem>
#include <vector>

#include "capture/byte_stream.h"

namespace kedge::capture {

/// Buffers; a write that the disk refuses leaves the file at the last whole block, so that writing can
/// go on when there is room again. Not thread-safe.
class FileSink final : public ByteSink {
 public:
  FileSink() = default;
  /// Writes out what it can; use close() to learn of failures.
  ~FileSink() override;

  /// Makes the file. An existing one is refused, never overwritten or appended to.
  Status create(const std::filesystem::path& path);
  Status write(std::span<const std::byte> bytes) override;
  Status flush() override;
  /// Flushes, waits until the disk has it all, and closes.
  Status close();

  /// Bytes taken so far.
  [[nodiscard]] std::uint64_t size() const { return on_disk_ + buffer_.size(); }

 private:
  std::filesystem::path path_;
  int file_ = -1;
  std::uint64_t on_disk_ = 0;
  std::vector<std::byte> buffer_;
};

}  // namespace kedge::capture
