#include "capture/file_sink.h"

#include <fcntl.h>
#include <fmt/core.h>
#include <unistd.h>

#include <cerrno>
#include <system_error>

#include "core/assert.h"

namespace kedge::capture {

namespace {

constexpr std::size_t buffer_bytes = 64U << 10U;

Error system_error(const char* doing, const std::filesystem::path& path) {
  return Error{fmt::format("{} {}: {}", doing, path.string(), std::generic_category().message(errno))};
}

bool write_all(int file, std::span<const std::byte> bytes) {
  while (!bytes.empty()) {
    const ssize_t written = ::write(file, bytes.data(), bytes.size());
    if (written < 0 && errno == EINTR) continue;
    if (written < 0) return false;
    bytes = bytes.subspan(static_cast<std::size_t>(written));
  }
  return true;
}

}  // namespace

FileSink::~FileSink() {
  if (file_ < 0) return;
  static_cast<void>(flush());
  ::close(file_);
}

Status FileSink::create(const std::filesystem::path& path) {
  KEDGE_ASSERT(file_ < 0);
  path_ = path;
  file_ = ::open(path.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0644);
  if (file_ < 0 && errno == EEXIST) {
    return Error{
        fmt::format("{} exists: captures are never overwritten; give another name or remove it", path.string())};
  }
  if (file_ < 0) return system_error("creating", path);
  buffer_.reserve(buffer_bytes);
  return {};
}

Status FileSink::write(std::span<const std::byte> bytes) {
  KEDGE_ASSERT(file_ >= 0);
  if (buffer_.size() + bytes.size() > buffer_bytes) {
    if (Status status = flush(); !status) return status;
  }
  buffer_.insert(buffer_.end(), bytes.begin(), bytes.end());
  return {};
}

Status FileSink::flush() {
  KEDGE_ASSERT(file_ >= 0);
  if (!write_all(file_, buffer_)) {
    Error error = system_error("writing", path_);
    // Takes back what came through of it: the buffer still holds everything and is tried again.
    const auto end = static_cast<off_t>(on_disk_);
    if (::ftruncate(file_, end) != 0 || ::lseek(file_, end, SEEK_SET) != end) error = system_error("truncating", path_);
    return error;
  }
  on_disk_ += buffer_.size();
  buffer_.clear();
  return {};
}

Status FileSink::close() {
  if (Status status = flush(); !status) return status;
  if (::fsync(file_) != 0 && errno != EINVAL && errno != EROFS) return system_error("syncing", path_);
  const int file = file_;
  file_ = -1;
  return ::close(file) == 0 ? Status{} : Status{system_error("closing", path_)};
}

}  // namespace kedge::capture
