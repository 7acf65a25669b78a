// Files beside a capture that a tool writes once and never over another.
#pragma once

#include <filesystem>
#include <string_view>

#include "core/result.h"

namespace kedge::recording {

/// Fails where something stands at `path` already.
[[nodiscard]] Status check_new(const std::filesystem::path& path);

/// Writes the whole file; an existing one is refused.
[[nodiscard]] Status write_new(const std::filesystem::path& path, std::string_view text);

}  // namespace kedge::recording
