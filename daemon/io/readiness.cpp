#include "io/readiness.h"

#include <fmt/core.h>
#include <systemd/sd-daemon.h>

#include <algorithm>
#include <asio/steady_timer.hpp>
#include <cstdint>
#include <string>

namespace kedge::io {

namespace {

// A line end in the text would start another assignment of the notification protocol.
std::string one_line(std::string_view text) {
  std::string line(text);
  std::replace_if(
      line.begin(), line.end(), [](char c) { return c == '\n' || c == '\0'; }, ' ');
  return line;
}

void notify(const std::string& assignments) {
  // Not being heard (no systemd, or its socket gone) changes nothing for us.
  static_cast<void>(::sd_notify(0, assignments.c_str()));
}

}  // namespace

class Readiness::Watchdog : public std::enable_shared_from_this<Watchdog> {
 public:
  explicit Watchdog(asio::io_context& context) : timer_(context) {
    std::uint64_t limit_us = 0;
    if (::sd_watchdog_enabled(0, &limit_us) > 0) period_ = std::chrono::microseconds(limit_us / 2);
  }

  [[nodiscard]] std::chrono::microseconds period() const { return period_; }

  void start() {
    stopped_ = period_.count() == 0;
    if (!stopped_) say();
  }
  void stop() {
    stopped_ = true;
    asio::error_code ignored;
    timer_.cancel(ignored);
  }

 private:
  void say() {
    notify("WATCHDOG=1");
    timer_.expires_after(period_);
    timer_.async_wait([self = shared_from_this()](const asio::error_code& error) {
      if (!error && !self->stopped_) self->say();
    });
  }

  asio::steady_timer timer_;
  std::chrono::microseconds period_{0};
  bool stopped_ = true;
};

Readiness::Readiness(asio::io_context& context) : watchdog_(std::make_shared<Watchdog>(context)) {}
Readiness::~Readiness() { watchdog_->stop(); }

void Readiness::ready(std::string_view text) {
  notify(fmt::format("READY=1\nSTATUS={}", one_line(text)));
  watchdog_->start();
}

void Readiness::status(std::string_view text) { notify(fmt::format("STATUS={}", one_line(text))); }

void Readiness::stopping() {
  watchdog_->stop();
  notify("STOPPING=1");
}

std::chrono::microseconds Readiness::watchdog_period() const { return watchdog_->period(); }

}  // namespace kedge::io
