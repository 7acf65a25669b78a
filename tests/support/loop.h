// Turns a program's one loop from within a test, so that nothing needs a thread.
#pragma once

#include <asio/executor_work_guard.hpp>
#include <asio/io_context.hpp>
#include <chrono>

namespace kedge::test {

/// Runs the loop until `done()`; false if it is not within `limit`. `done` is asked every few milliseconds too.
template <class Done>
[[nodiscard]] bool run_until(asio::io_context& context, Done done,
                             std::chrono::milliseconds limit = std::chrono::seconds(10)) {
  const auto work = asio::make_work_guard(context);
  const auto end = std::chrono::steady_clock::now() + limit;
  while (!done()) {
    if (std::chrono::steady_clock::now() > end) return false;
    context.restart();
    context.run_one_for(std::chrono::milliseconds(5));
  }
  return true;
}

/// Runs the loop for a while.
inline void run_for(asio::io_context& context, std::chrono::milliseconds time) {
  const auto work = asio::make_work_guard(context);
  context.restart();
  context.run_for(time);
}

}  // namespace kedge::test
