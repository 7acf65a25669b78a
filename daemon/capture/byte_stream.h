// Where captures go to and come from: bytes in order, nothing else.
//
// The format is written and read over these two interfaces, so that it can be tried against memory, a
// full disk or a torn file as well as against a real one (capture/file_sink.h, capture/file_source.h).
#pragma once

#include <cstddef>
#include <span>

#include "core/result.h"

namespace kedge::capture {

class ByteSink {
 public:
  ByteSink() = default;
  ByteSink(const ByteSink&) = delete;
  ByteSink& operator=(const ByteSink&) = delete;
  virtual ~ByteSink() = default;

  /// Takes all of `bytes` or, on an error, none of them: a capture never holds half a block because
  /// a disk was full for a while.
  virtual Status write(std::span<const std::byte> bytes) = 0;
  /// Hands everything taken so far to the operating system.
  virtual Status flush() = 0;
};

class ByteSource {
 public:
  ByteSource() = default;
  ByteSource(const ByteSource&) = delete;
  ByteSource& operator=(const ByteSource&) = delete;
  virtual ~ByteSource() = default;

  /// Fills the front of `room`; returns how many bytes, 0 at the end.
  virtual Result<std::size_t> read(std::span<std::byte> room) = 0;
};

}  // namespace kedge::capture
