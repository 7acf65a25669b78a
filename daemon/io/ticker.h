// Ticks are records: the engine publishes on them. They fall on a fixed grid of the monotonic clock,
// so they do not drift; when the loop was late, the ticks it missed are skipped and counted, never
// sent in a bunch.
#pragma once

#include <asio/io_context.hpp>
#include <cstdint>
#include <functional>
#include <memory>

#include "core/time.h"

namespace kedge::io {

struct TickEvent {
  TimeNs due_ns = 0;          ///< on the grid
  TimeNs now_ns = 0;          ///< when it came; never before due_ns
  std::uint64_t skipped = 0;  ///< ticks left out just before this one
};

class Ticker {
 public:
  /// period_ns > 0.
  Ticker(asio::io_context& context, TimeNs period_ns, std::function<void(const TickEvent&)> handler);
  ~Ticker();
  Ticker(const Ticker&) = delete;
  Ticker& operator=(const Ticker&) = delete;

  /// The first tick comes one period from now.
  void start();
  /// No tick comes after it; also done by the destructor.
  void stop();

  /// Since the start.
  [[nodiscard]] std::uint64_t ticks() const;
  [[nodiscard]] std::uint64_t skipped() const;

 private:
  class State;
  std::shared_ptr<State> state_;
};

}  // namespace kedge::io
