#include "recording/new_file.h"

#include <fmt/core.h>

#include <cerrno>
#include <cstdio>
#include <system_error>

namespace kedge::recording {

namespace {

Error already_there(const std::filesystem::path& path) {
  return Error{fmt::format("{} exists: it is never overwritten; give another name or remove it", path.string())};
}

Error failed(const std::filesystem::path& path) {
  return Error{fmt::format("writing {}: {}", path.string(), std::generic_category().message(errno))};
}

}  // namespace

Status check_new(const std::filesystem::path& path) {
  std::error_code ignored;
  if (std::filesystem::exists(std::filesystem::symlink_status(path, ignored))) return already_there(path);
  return {};
}

Status write_new(const std::filesystem::path& path, std::string_view text) {
  std::FILE* file = std::fopen(path.c_str(), "wbx");
  if (file == nullptr) return errno == EEXIST ? already_there(path) : failed(path);
  const bool written = std::fwrite(text.data(), 1, text.size(), file) == text.size();
  if (std::fclose(file) != 0 || !written) return failed(path);
  return {};
}

}  // namespace kedge::recording
