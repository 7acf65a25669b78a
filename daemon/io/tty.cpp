#include "io/tty.h"

// <termios.h> cannot ask for arbitrary rates, and cannot stand beside this header.
#include <asm/termbits.h>
#include <fcntl.h>
#include <fmt/core.h>
#include <sys/ioctl.h>
#include <unistd.h>

#include <cerrno>
#include <cmath>
#include <system_error>

namespace kedge::io {

namespace {

std::string system_text(int error) { return std::generic_category().message(error); }

Status make_raw(int fd, std::uint32_t baud) {
  termios2 line{};
  if (::ioctl(fd, TCGETS2, &line) != 0) {
    if (errno == ENOTTY) return Error{"it is not a serial port"};
    return Error{system_text(errno)};
  }
  line.c_iflag = 0;
  line.c_oflag = 0;
  line.c_lflag = 0;
  line.c_cflag = CS8 | CREAD | CLOCAL | BOTHER;
  line.c_ispeed = baud;
  line.c_ospeed = baud;
  // One byte at least, so that a read of 0 bytes means the end and not "nothing yet".
  line.c_cc[VMIN] = 1;
  line.c_cc[VTIME] = 0;
  if (::ioctl(fd, TCSETS2, &line) != 0) return Error{fmt::format("cannot set {} baud: {}", baud, system_text(errno))};
  if (::ioctl(fd, TCGETS2, &line) != 0) return Error{system_text(errno)};
  // A receiver samples wrongly from about 5 % on, shared by both ends (common practice).
  const double got = line.c_ospeed;
  if (std::abs(got - baud) > 0.03 * baud) {
    return Error{fmt::format("cannot run at {} baud, its nearest rate is {}", baud, line.c_ospeed)};
  }
  ::ioctl(fd, TCFLSH, TCIFLUSH);
  return {};
}

}  // namespace

Result<int> open_tty(const std::string& device, std::uint32_t baud) {
  const int fd = ::open(device.c_str(), O_RDONLY | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
  if (fd < 0) {
    const std::string remedy = errno == EACCES ? "; the user needs to be in the group dialout" : "";
    return Error{system_text(errno) + remedy};
  }
  if (Status raw = make_raw(fd, baud); !raw) {
    ::close(fd);
    return Error{raw.error()};
  }
  return fd;
}

}  // namespace kedge::io
