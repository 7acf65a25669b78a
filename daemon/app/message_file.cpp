#include "app/message_file.h"

#include <fmt/core.h>

#include <cerrno>
#include <cstring>

namespace kedge::app {

Status MessageFile::open(const std::string& path) {
  path_ = path;
  file_.reset(path == "-" ? stdout : std::fopen(path.c_str(), "wb"));
  if (!file_) return Error{fmt::format("{}: cannot write messages: {}", path, std::strerror(errno))};
  return {};
}

void MessageFile::message(const feed::v1::Message& message) {
  const std::string line = feed::encode(message, feed::Encoding::json);
  if (std::fwrite(line.data(), 1, line.size(), file_.get()) != line.size() && failure_ == 0) failure_ = errno;
}

Status MessageFile::close() {
  if (file_ && std::fflush(file_.get()) != 0 && failure_ == 0) failure_ = errno;
  file_.reset();
  if (failure_ != 0) return Error{fmt::format("{}: messages are missing: {}", path_, std::strerror(failure_))};
  return {};
}

}  // namespace kedge::app
