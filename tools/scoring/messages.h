// Reads message files: the canonical stream, one JSON object a line.
#pragma once

#include <cstddef>
#include <filesystem>
#include <functional>
#include <iosfwd>
#include <string>

#include "core/result.h"
#include "proto/feed.pb.h"

namespace kedge::scoring {

struct MessagesRead {
  std::size_t messages = 0;
  std::size_t lines_dropped = 0;
  std::string first_drop;  ///< "FILE:LINE: why"
};

/// Longer lines are dropped unread.
inline constexpr std::size_t line_bytes_max = std::size_t{1} << 20U;

/// Hands every message to `take`. Lines that are none are counted and passed over; fails only when
/// the file cannot be read.
[[nodiscard]] Result<MessagesRead> read_messages(const std::filesystem::path& path,
                                                 const std::function<void(const feed::v1::Message&)>& take);
/// The same from a stream; `name` stands for the file in errors.
MessagesRead read_messages(std::istream& in, const std::string& name,
                           const std::function<void(const feed::v1::Message&)>& take);

}  // namespace kedge::scoring
