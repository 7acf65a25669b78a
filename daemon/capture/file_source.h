// Reads a capture from disk, or from a pipe.
#pragma once

#include <filesystem>

#include "capture/byte_stream.h"

namespace kedge::capture {

class FileSource final : public ByteSource {
 public:
  FileSource() = default;
  ~FileSource() override;

  Status open(const std::filesystem::path& path);
  Result<std::size_t> read(std::span<std::byte> room) override;

 private:
  std::filesystem::path path_;
  int file_ = -1;
};

}  // namespace kedge::capture
