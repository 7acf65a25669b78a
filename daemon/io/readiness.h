// What systemd is told (Type=notify): ready only after the ports are open, a status line, and that the
// one loop still turns. Without systemd all of it does nothing.
#pragma once

#include <asio/io_context.hpp>
#include <chrono>
#include <memory>
#include <string_view>

namespace kedge::io {

class Readiness {
 public:
  explicit Readiness(asio::io_context& context);
  ~Readiness();
  Readiness(const Readiness&) = delete;
  Readiness& operator=(const Readiness&) = delete;

  /// READY=1 with a status line; from here on WATCHDOG=1 is sent from the loop at half of WatchdogSec.
  void ready(std::string_view status);
  /// STATUS=, one line.
  void status(std::string_view status);
  /// STOPPING=1, and no more watchdog.
  void stopping();

  /// Half of WatchdogSec; zero: no watchdog is asked for.
  [[nodiscard]] std::chrono::microseconds watchdog_period() const;

 private:
  class Watchdog;
  std::shared_ptr<Watchdog> watchdog_;
};

}  // namespace kedge::io
