#include "io/serial_link.h"

#include <fmt/core.h>
#include <sys/stat.h>
#include <unistd.h>

#include <array>
#include <asio/posix/stream_descriptor.hpp>
#include <asio/steady_timer.hpp>
#include <cerrno>
#include <chrono>
#include <utility>

#include "io/backoff.h"
#include "io/monotonic.h"
#include "io/system_text.h"
#include "io/tty.h"

namespace kedge::io {

namespace {

constexpr int chunks_per_turn = 4;
// How often the path is compared with the open device.
constexpr std::chrono::seconds device_check_period{1};

}  // namespace

class SerialLink::State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& context, SerialLinkOptions options, LinkEvents& events)
      : options_(std::move(options)), events_(events), port_(context), timer_(context) {}

  void open() {
    closed_ = false;
    try_open();
  }

  void close() {
    closed_ = true;
    asio::error_code ignored;
    timer_.cancel(ignored);
    close_port();
  }

  [[nodiscard]] const LinkCounters& counters() const { return counters_; }

 private:
  void try_open() {
    const Result<int> fd = open_tty(options_.device, options_.baud);
    if (!fd) {
      fail(fd.error());
      return;
    }
    asio::error_code error;
    port_.assign(*fd, error);
    if (error) {
      ::close(*fd);
      fail(error.message());
      return;
    }
    ++counters_.openings;
    heard_ = false;
    reason_.clear();
    events_.state_changed(options_.source, true, "");
    if (closed_) return;
    wait_for_bytes();
    check_device_later();
  }

  void fail(const std::string& why) {
    close_port();
    timer_.cancel();
    const std::string reason = fmt::format("{}: {}", options_.device, why);
    if (reason != reason_) {
      reason_ = reason;
      events_.state_changed(options_.source, false, reason_);
    }
    if (closed_) return;
    timer_.expires_after(backoff_.next());
    timer_.async_wait([self = shared_from_this()](const asio::error_code& error) {
      if (!error && !self->closed_) self->try_open();
    });
  }

  void close_port() {
    ++opening_;  // what still waits belongs to an opening that is over
    asio::error_code ignored;
    port_.close(ignored);
  }

  void wait_for_bytes() {
    port_.async_wait(asio::posix::stream_descriptor::wait_read,
                     [self = shared_from_this(), opening = opening_](const asio::error_code& error) {
                       if (self->closed_ || opening != self->opening_) return;
                       if (error) {
                         self->fail(error.message());
                       } else {
                         self->read_turn();
                       }
                     });
  }

  void read_turn() {
    std::array<std::byte, serial_chunk_bytes_max> chunk;
    for (int i = 0; i < chunks_per_turn; ++i) {
      const ssize_t count = ::read(port_.native_handle(), chunk.data(), chunk.size());
      if (count < 0 && (errno == EAGAIN || errno == EINTR)) break;
      if (count <= 0) {
        fail(count == 0 ? std::string("the device was unplugged or closed") : system_text(errno));
        return;
      }
      // Only a port that delivers is well again: one that opens and fails at once keeps backing off.
      if (!std::exchange(heard_, true)) backoff_.reset();
      ++counters_.records;
      counters_.bytes += static_cast<std::uint64_t>(count);
      const std::uint64_t opening = opening_;
      events_.received(options_.source, now_monotonic(), std::span(chunk).first(static_cast<std::size_t>(count)), {});
      if (closed_ || opening != opening_) return;
    }
    wait_for_bytes();
  }

  void check_device_later() {
    timer_.expires_after(device_check_period);
    timer_.async_wait([self = shared_from_this(), opening = opening_](const asio::error_code& error) {
      if (error || self->closed_ || opening != self->opening_) return;
      if (self->leads_elsewhere()) {
        self->fail("the path now leads to another device");
      } else {
        self->check_device_later();
      }
    });
  }

  // A vanished path is no reason to leave a port that still works.
  [[nodiscard]] bool leads_elsewhere() {
    struct stat at_path {};
    struct stat opened {};
    return ::stat(options_.device.c_str(), &at_path) == 0 && ::fstat(port_.native_handle(), &opened) == 0 &&
           (at_path.st_dev != opened.st_dev || at_path.st_ino != opened.st_ino || at_path.st_rdev != opened.st_rdev);
  }

  SerialLinkOptions options_;
  LinkEvents& events_;
  asio::posix::stream_descriptor port_;
  asio::steady_timer timer_;  // the next attempt while closed, the next device check while open
  Backoff backoff_;
  LinkCounters counters_;
  std::string reason_;
  std::uint64_t opening_ = 0;
  bool heard_ = false;
  bool closed_ = true;
};

SerialLink::SerialLink(asio::io_context& context, SerialLinkOptions options, LinkEvents& events)
    : state_(std::make_shared<State>(context, std::move(options), events)) {}
SerialLink::~SerialLink() { close(); }

Status SerialLink::open() {
  state_->open();
  return {};
}
void SerialLink::close() { state_->close(); }
const LinkCounters& SerialLink::counters() const { return state_->counters(); }

}  // namespace kedge::io
