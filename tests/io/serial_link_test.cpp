// Serial lines over real pseudo-terminals.
#include <fcntl.h>
#include <stdlib.h>
#include <sys/ioctl.h>
#include <termios.h>
#include <unistd.h>

#include <array>
#include <catch2/catch.hpp>
#include <filesystem>
#include <utility>

#include "io/serial_link.h"
#include "io/tty.h"
#include "support/link_events.h"
#include "support/loop.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace std::chrono_literals;

namespace {

// The device's end of a cable.
class Cable {
 public:
  Cable() : master_(::posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK)) {
    if (::grantpt(master_) != 0 || ::unlockpt(master_) != 0) throw std::runtime_error("no pseudo-terminal");
    std::array<char, 128> name{};
    ::ptsname_r(master_, name.data(), name.size());
    path_ = name.data();
  }
  Cable(const Cable&) = delete;
  Cable& operator=(const Cable&) = delete;
  ~Cable() { pull(); }

  void pull() {
    if (master_ >= 0) ::close(std::exchange(master_, -1));
  }
  [[nodiscard]] bool send(const std::string& bytes) const {
    return ::write(master_, bytes.data(), bytes.size()) == static_cast<ssize_t>(bytes.size());
  }
  [[nodiscard]] const std::string& path() const { return path_; }
  // The line settings, seen from the device's end.
  [[nodiscard]] termios settings() const {
    termios line{};
    ::tcgetattr(master_, &line);
    return line;
  }
  // struct termios2 is eleven words long and ends with the output rate (asm-generic/termbits.h).
  [[nodiscard]] std::uint32_t baud() const {
    using Words = std::array<std::uint32_t, 11>;
    Words termios2{};
    ::ioctl(master_, _IOR('T', 0x2A, Words), termios2.data());
    return termios2.back();
  }

 private:
  int master_;
  std::string path_;
};

}  // namespace

TEST_CASE("every byte of a serial line comes in as it was sent") {
  asio::io_context context;
  test::LinkEventLog events;
  const Cable cable;
  io::SerialLink link(context, {.source = 2, .name = "mast", .device = cable.path(), .baud = 115200}, events);
  REQUIRE(link.open().ok());
  REQUIRE(events.states.size() == 1);
  REQUIRE(events.states[0].open);
  // All byte values: interrupt, flow control and line ends among them mean nothing on a raw line.
  std::string noise;
  for (int i = 0; i < 3000; ++i) noise += static_cast<char>((i * 7 + i / 256) & 0xFF);
  const TimeNs before_ns = io::now_monotonic();
  REQUIRE(cable.send(noise));
  REQUIRE(test::run_until(context, [&] { return events.text().size() == noise.size(); }));
  CHECK(events.text() == noise);
  for (const auto& piece : events.received_list) {
    CHECK(piece.source == 2);
    CHECK(piece.bytes.size() <= io::serial_chunk_bytes_max);
    CHECK(piece.path.family == capture::Family::none);
    CHECK(piece.arrival_ns >= before_ns);
    CHECK(piece.arrival_ns <= io::now_monotonic());
  }
  CHECK(link.counters().bytes == 3000);
}

TEST_CASE("a line is raw, 8N1, at the rate asked for") {
  const Cable cable;
  const auto fd = io::open_tty(cable.path(), 57600);
  REQUIRE(fd.ok());
  const termios line = cable.settings();
  CHECK(cable.baud() == 57600);
  CHECK((line.c_cflag & (CSIZE | PARENB | CSTOPB)) == CS8);
  CHECK((line.c_lflag & (ICANON | ECHO | ISIG)) == 0);
  CHECK((line.c_iflag & (IXON | ICRNL | ISTRIP)) == 0);
  ::close(*fd);
  // 250000 has no constant in termios.
  const auto odd = io::open_tty(cable.path(), 250000);
  REQUIRE(odd.ok());
  CHECK(cable.baud() == 250000);
  ::close(*odd);
}

TEST_CASE("a pulled cable is told, and found again under the same name") {
  asio::io_context context;
  test::LinkEventLog events;
  const test::TemporaryFolder folder;
  const std::string device = folder.file("mast");
  Cable first;
  std::filesystem::create_symlink(first.path(), device);
  io::SerialLink link(context, {.source = 2, .name = "mast", .device = device}, events);
  REQUIRE(link.open().ok());
  REQUIRE(first.send("first"));
  REQUIRE(test::run_until(context, [&] { return events.text() == "first"; }));

  first.pull();
  std::filesystem::remove(device);
  REQUIRE(test::run_until(context, [&] { return events.states.size() >= 2; }));
  CHECK_FALSE(events.states[1].open);
  CHECK(events.states[1].reason.starts_with(device + ": "));
  // Two attempts fail (0.25 s and 0.75 s after the loss) and the reason is told once; the third (1.75 s) finds it.
  test::run_for(context, 1000ms);
  REQUIRE(events.states.size() == 3);
  CHECK(events.states[2].reason == device + ": No such file or directory");

  const Cable second;
  std::filesystem::create_symlink(second.path(), device);
  REQUIRE(test::run_until(context, [&] { return events.states.back().open; }));
  const double away_s = seconds(events.states.back().time_ns - events.states[1].time_ns);
  CHECK(away_s > 1.70);
  CHECK(away_s < 1.95);
  REQUIRE(second.send("second"));
  REQUIRE(test::run_until(context, [&] { return events.text() == "firstsecond"; }));
  CHECK(events.states.size() == 4);
  CHECK(link.counters().openings == 2);
}

TEST_CASE("a path that leads to another device is followed though the old one still stands") {
  asio::io_context context;
  test::LinkEventLog events;
  const test::TemporaryFolder folder;
  const std::string device = folder.file("mast");
  const Cable first;
  const Cable second;
  std::filesystem::create_symlink(first.path(), device);
  io::SerialLink link(context, {.source = 2, .name = "mast", .device = device}, events);
  REQUIRE(link.open().ok());
  std::filesystem::remove(device);
  std::filesystem::create_symlink(second.path(), device);
  REQUIRE(test::run_until(context, [&] { return events.states.size() == 3; }));
  CHECK(events.states[1].reason == device + ": the path now leads to another device");
  CHECK(events.states[2].open);
  REQUIRE(second.send("second"));
  REQUIRE(test::run_until(context, [&] { return events.text() == "second"; }));
}

TEST_CASE("a device that is missing or is none is no failure of the station") {
  asio::io_context context;
  const test::TemporaryFolder folder;
  const std::string device = folder.file("mast");
  test::LinkEventLog events;
  io::SerialLink link(context, {.source = 2, .name = "mast", .device = device}, events);
  REQUIRE(link.open().ok());
  REQUIRE(events.states.size() == 1);
  CHECK_FALSE(events.states[0].open);
  CHECK(events.states[0].reason == device + ": No such file or directory");

  std::filesystem::create_directory(device);
  REQUIRE(test::run_until(context, [&] { return events.states.size() == 2; }));
  CHECK(events.states[1].reason == device + ": it is not a serial port");

  std::filesystem::remove(device);
  const Cable cable;
  std::filesystem::create_symlink(cable.path(), device);
  REQUIRE(test::run_until(context, [&] { return events.states.back().open; }));
  link.close();
  REQUIRE(cable.send("late"));
  test::run_for(context, 20ms);
  CHECK(events.text().empty());
}

TEST_CASE("a serial port has one reader, and a second is told why not") {
  asio::io_context context;
  test::LinkEventLog events;
  const Cable cable;
  const auto first = io::open_tty(cable.path(), 115200);
  REQUIRE(first.ok());
  const auto second = io::open_tty(cable.path(), 57600);
  REQUIRE_FALSE(second.ok());
  CHECK(second.error() == "another program holds it; stop that program or choose another port");
  // Nor did the attempt change the first one's line.
  CHECK(cable.baud() == 115200);

  // A link waits for it as for a missing device.
  io::SerialLink link(context, {.source = 2, .name = "mast", .device = cable.path()}, events);
  REQUIRE(link.open().ok());
  CHECK(events.states.back().reason ==
        cable.path() + ": another program holds it; stop that program or choose another port");
  ::close(*first);
  REQUIRE(test::run_until(context, [&] { return events.states.back().open; }));
}

TEST_CASE("a pseudo-terminal whose reader died can be opened by any user again") {
  const Cable cable;
  const auto first = io::open_tty(cable.path(), 115200);
  REQUIRE(first.ok());
  ::close(*first);
  const auto second = io::open_tty(cable.path(), 115200);
  REQUIRE(second.ok());
  // The exclusive mode binds all but root, and would still be there.
  int exclusive = 1;
  REQUIRE(::ioctl(*second, TIOCGEXCL, &exclusive) == 0);
  CHECK(exclusive == 0);
  ::close(*second);
}
