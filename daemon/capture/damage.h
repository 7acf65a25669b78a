// A stretch of a capture that could not be read.
#pragma once

#include <cstdint>
#include <string>

namespace kedge::capture {

struct Damage {
  std::uint64_t offset = 0;      ///< of its first byte in the file
  std::uint64_t bytes_lost = 0;  ///< its length
  std::string reason;
};

}  // namespace kedge::capture
