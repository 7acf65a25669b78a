// What systemd hears, on a notification socket of our own (sd_notify(3)).
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>

#include <array>
#include <catch2/catch.hpp>
#include <cstdlib>
#include <cstring>
#include <string>
#include <vector>

#include "io/readiness.h"
#include "support/loop.h"
#include "support/temporary_folder.h"

using namespace kedge;
using namespace std::chrono_literals;

namespace {

class NotifySocket {
 public:
  explicit NotifySocket(const std::string& path) : fd_(::socket(AF_UNIX, SOCK_DGRAM | SOCK_NONBLOCK, 0)) {
    sockaddr_un at{};
    at.sun_family = AF_UNIX;
    std::strncpy(at.sun_path, path.c_str(), sizeof(at.sun_path) - 1);
    if (::bind(fd_, reinterpret_cast<sockaddr*>(&at), sizeof(at)) != 0) throw std::runtime_error("no socket");
    ::setenv("NOTIFY_SOCKET", path.c_str(), 1);
    ::setenv("WATCHDOG_USEC", "40000", 1);
    ::setenv("WATCHDOG_PID", std::to_string(::getpid()).c_str(), 1);
  }
  NotifySocket(const NotifySocket&) = delete;
  NotifySocket& operator=(const NotifySocket&) = delete;
  ~NotifySocket() {
    for (const char* name : {"NOTIFY_SOCKET", "WATCHDOG_USEC", "WATCHDOG_PID"}) ::unsetenv(name);
    ::close(fd_);
  }

  std::vector<std::string> heard() const {
    std::vector<std::string> all;
    std::array<char, 4096> text;
    ssize_t count = 0;
    while ((count = ::recv(fd_, text.data(), text.size(), 0)) > 0)
      all.emplace_back(text.data(), static_cast<std::size_t>(count));
    return all;
  }

 private:
  int fd_;
};

}  // namespace

TEST_CASE("systemd hears ready, status, the watchdog at half its time, and stopping") {
  asio::io_context context;
  const test::TemporaryFolder folder;
  const NotifySocket systemd(folder.file("notify"));
  io::Readiness readiness(context);
  CHECK(readiness.watchdog_period() == 20ms);
  test::run_for(context, 50ms);
  CHECK(systemd.heard().empty());

  readiness.ready("2 links\nREADY=0");
  CHECK(systemd.heard() == std::vector<std::string>{"READY=1\nSTATUS=2 links READY=0", "WATCHDOG=1"});
  test::run_for(context, 210ms);
  const auto pings = systemd.heard();
  CHECK(pings.size() >= 8);
  CHECK(pings.size() <= 11);
  for (const std::string& ping : pings) CHECK(ping == "WATCHDOG=1");

  readiness.status("6 tags");
  readiness.stopping();
  CHECK(systemd.heard() == std::vector<std::string>{"STATUS=6 tags", "STOPPING=1"});
  test::run_for(context, 60ms);
  CHECK(systemd.heard().empty());
}

TEST_CASE("a loop that hangs sends no watchdog") {
  asio::io_context context;
  const test::TemporaryFolder folder;
  const NotifySocket systemd(folder.file("notify"));
  io::Readiness readiness(context);
  readiness.ready("");
  CHECK(systemd.heard().size() == 2);
  ::usleep(100'000);
  CHECK(systemd.heard().empty());
}
