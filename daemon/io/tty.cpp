#include "io/tty.h"

// <termios.h> cannot ask for arbitrary rates, and cannot stand beside this header.
#include <asm/termbits.h>
#include <fcntl.h>
#include <fmt/core.h>
#include <sys/file.h>
#include <sys/ioctl.h>
#include <sys/stat.h>
#include <sys/sysmacros.h>
#include <unistd.h>

#include <cerrno>
#include <cmath>

#include "io/system_text.h"

namespace kedge::io {

namespace {

constexpr const char* held_text = "another program holds it; stop that program or choose another port";
// Of the device ends of pseudo-terminals (devices.txt of the Linux documentation).
constexpr unsigned pty_major_first = 136;
constexpr unsigned pty_major_last = 143;

bool is_pseudo_terminal(int fd) {
  struct stat there {};
  if (::fstat(fd, &there) != 0) return false;
  const unsigned device_major = major(there.st_rdev);
  return device_major >= pty_major_first && device_major <= pty_major_last;
}

// Two readers would each get some of the bytes. The lock stops another station, be it run by root; the
// exclusive mode stops all programs that are not.
Status claim(int fd) {
  if (::flock(fd, LOCK_EX | LOCK_NB) != 0) return Error{errno == EWOULDBLOCK ? held_text : system_text(errno)};
  // A pseudo-terminal keeps the mode when its last user dies, and would shut out the next.
  if (!is_pseudo_terminal(fd) && ::ioctl(fd, TIOCEXCL) != 0) return Error{system_text(errno)};
  return {};
}

Status make_raw(int fd, std::uint32_t baud) {
  termios2 line{};
  if (::ioctl(fd, TCGETS2, &line) != 0) {
    if (errno == ENOTTY) return Error{"it is not a serial port"};
    return Error{system_text(errno)};
  }
  if (Status claimed = claim(fd); !claimed) return claimed;
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
    if (errno == EBUSY) return Error{held_text};
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
