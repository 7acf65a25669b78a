// The configuration as people write it: Protocol Buffers text format, fragments included, every
// error with its place.
//
// A syntax error stops the reading of its file. After a clean parse, all errors of meaning are
// reported at once, each as "file:line:column: what is wrong and what would be right". Nothing is
// clipped or guessed.
//
// Fragments (`include`, relative to the file that says it) are merged in order, the including file's
// own fields last; what comes later wins field by field. Anchors, tags, links and places merge into
// the entry of the same name from an earlier file, or are appended. Lists of numbers are replaced.
#pragma once

#include <cstddef>
#include <filesystem>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "proto/config.pb.h"

namespace kedge::config {

struct Loaded {
  std::optional<v1::Configuration> merged;  ///< without `include`; present exactly when there are no errors
  std::vector<std::string> errors;          ///< "file:line:column: text", in order of place where they share a file
};

inline constexpr std::size_t file_bytes_max = 1 << 20;
inline constexpr int files_max = 64;         ///< in all
inline constexpr int include_depth_max = 8;  ///< the first file counts as 1

/// Reads, merges and checks the file and all that it includes.
[[nodiscard]] Loaded load(const std::filesystem::path& path);

/// The same for a text that is at hand, such as the one in a capture: `name` stands for the file in
/// errors, and `include` is refused.
[[nodiscard]] Loaded load_text(std::string_view text, std::string_view name);

}  // namespace kedge::config
