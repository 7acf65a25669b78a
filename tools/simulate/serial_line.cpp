#include "simulate/serial_line.h"

#include <fcntl.h>
#include <fmt/core.h>
#include <poll.h>
#include <pty.h>
#include <termios.h>
#include <unistd.h>

#include <array>
#include <cerrno>
#include <climits>
#include <cstring>
#include <filesystem>
#include <system_error>

namespace kedge::simulate {

namespace {

Error failure(const std::string& path, const char* what) {
  return Error{fmt::format("{}: {}: {}", path, what, std::strerror(errno))};
}

bool make_raw(int descriptor) {
  termios settings{};
  if (tcgetattr(descriptor, &settings) != 0) return false;
  cfmakeraw(&settings);
  return tcsetattr(descriptor, TCSANOW, &settings) == 0;
}

}  // namespace

SerialLine::~SerialLine() {
  if (descriptor_ >= 0) ::close(descriptor_);
  std::error_code ignored;
  if (!link_.empty()) std::filesystem::remove(link_, ignored);
}

Status SerialLine::open(const std::string& device) {
  descriptor_ = ::open(device.c_str(), O_WRONLY | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
  if (descriptor_ < 0) return failure(device, "cannot be opened for writing");
  if (!make_raw(descriptor_)) return failure(device, "is no serial device");
  return {};
}

Status SerialLine::make_pty(const std::string& link) {
  int station_end = -1;
  std::array<char, PATH_MAX> name{};
  if (openpty(&descriptor_, &station_end, name.data(), nullptr, nullptr) != 0) {
    return failure(link, "no pseudo-terminal to be had");
  }
  // Raw mode is kept by the terminal; the end itself is closed so that its emptiness can be seen.
  const bool raw = make_raw(station_end);
  ::close(station_end);
  if (!raw) return failure(link, "the pseudo-terminal does not go raw");
  if (fcntl(descriptor_, F_SETFL, O_NONBLOCK) != 0) return failure(link, "the pseudo-terminal blocks");
  std::error_code error;
  // A link that an earlier run left behind is ours to replace; anything else is not.
  if (std::filesystem::is_symlink(link)) std::filesystem::remove(link, error);
  std::filesystem::create_symlink(name.data(), link, error);
  if (error) return Error{fmt::format("{}: the link cannot be made: {}", link, error.message())};
  link_ = link;
  return {};
}

void SerialLine::send(std::span<const std::byte> frame) {
  pollfd state{.fd = descriptor_, .events = POLLOUT, .revents = 0};
  const bool open = poll(&state, 1, 0) == 1 && (state.revents & (POLLHUP | POLLERR)) == 0;
  if (!open || write(descriptor_, frame.data(), frame.size()) != static_cast<ssize_t>(frame.size())) ++refused_;
}

}  // namespace kedge::simulate
