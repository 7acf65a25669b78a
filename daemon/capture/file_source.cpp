#include "capture/file_source.h"

#include <fcntl.h>
#include <fmt/core.h>
#include <unistd.h>

#include <cerrno>
#include <system_error>

#include "core/assert.h"

namespace kedge::capture {

FileSource::~FileSource() {
  if (file_ >= 0) ::close(file_);
}

Status FileSource::open(const std::filesystem::path& path) {
  KEDGE_ASSERT(file_ < 0);
  path_ = path;
  file_ = ::open(path.c_str(), O_RDONLY | O_CLOEXEC);
  if (file_ < 0) return Error{fmt::format("opening {}: {}", path.string(), std::generic_category().message(errno))};
  return {};
}

Result<std::size_t> FileSource::read(std::span<std::byte> room) {
  KEDGE_ASSERT(file_ >= 0);
  for (;;) {
    const ssize_t got = ::read(file_, room.data(), room.size());
    if (got >= 0) return static_cast<std::size_t>(got);
    if (errno != EINTR) {
      return Error{fmt::format("reading {}: {}", path_.string(), std::generic_category().message(errno))};
    }
  }
}

}  // namespace kedge::capture
