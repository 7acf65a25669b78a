// How long to wait before a port is tried again.
#pragma once

#include <algorithm>
#include <chrono>

namespace kedge::io {

/// 0.25 s, doubled at each failure, 5 s at most.
class Backoff {
 public:
  static constexpr std::chrono::milliseconds first{250};
  static constexpr std::chrono::milliseconds last{5000};

  [[nodiscard]] std::chrono::milliseconds next() {
    const std::chrono::milliseconds now = wait_;
    wait_ = std::min(2 * wait_, last);
    return now;
  }
  void reset() { wait_ = first; }

 private:
  std::chrono::milliseconds wait_ = first;
};

}  // namespace kedge::io
