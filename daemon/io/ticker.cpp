#include "io/ticker.h"

#include <asio/steady_timer.hpp>
#include <chrono>
#include <utility>

#include "core/assert.h"
#include "io/monotonic.h"

namespace kedge::io {

class Ticker::State : public std::enable_shared_from_this<State> {
 public:
  State(asio::io_context& context, TimeNs period_ns, std::function<void(const TickEvent&)> handler)
      : timer_(context), period_ns_(period_ns), handler_(std::move(handler)) {
    KEDGE_ASSERT(period_ns > 0);
  }

  void start() {
    due_ns_ = now_monotonic() + period_ns_;
    stopped_ = false;
    wait();
  }
  void stop() {
    stopped_ = true;
    asio::error_code ignored;
    timer_.cancel(ignored);
  }
  [[nodiscard]] std::uint64_t ticks() const { return ticks_; }
  [[nodiscard]] std::uint64_t skipped() const { return skipped_; }

 private:
  void wait() {
    // Asio's steady clock is CLOCK_MONOTONIC, the clock of now_monotonic().
    timer_.expires_at(asio::steady_timer::time_point(std::chrono::nanoseconds(due_ns_)));
    timer_.async_wait([self = shared_from_this()](const asio::error_code& error) {
      if (!error && !self->stopped_) self->tick();
    });
  }

  void tick() {
    TickEvent event;
    event.now_ns = now_monotonic();
    // The newest instant of the grid that has passed is the one that is told.
    const TimeNs missed = (event.now_ns - due_ns_) / period_ns_;
    event.due_ns = due_ns_ + missed * period_ns_;
    event.skipped = static_cast<std::uint64_t>(missed);
    due_ns_ = event.due_ns + period_ns_;
    skipped_ += event.skipped;
    ++ticks_;
    handler_(event);
    if (!stopped_) wait();
  }

  asio::steady_timer timer_;
  TimeNs period_ns_;
  TimeNs due_ns_ = 0;
  std::function<void(const TickEvent&)> handler_;
  std::uint64_t ticks_ = 0;
  std::uint64_t skipped_ = 0;
  bool stopped_ = true;
};

Ticker::Ticker(asio::io_context& context, TimeNs period_ns, std::function<void(const TickEvent&)> handler)
    : state_(std::make_shared<State>(context, period_ns, std::move(handler))) {}
Ticker::~Ticker() { stop(); }

void Ticker::start() { state_->start(); }
void Ticker::stop() { state_->stop(); }
std::uint64_t Ticker::ticks() const { return state_->ticks(); }
std::uint64_t Ticker::skipped() const { return state_->skipped(); }

}  // namespace kedge::io
