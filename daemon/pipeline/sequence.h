// Which packets of a device arrived, twice or not at all, from their sequence numbers.
#pragma once

#include <array>
#include <cstdint>
#include <utility>

#include "core/time.h"
#include "pipeline/rate_window.h"

namespace kedge::pipeline {

class SequenceTracker {
 public:
  /// Notes a packet; false when this number was seen among the last 256, or lies so far behind them that it
  /// cannot be told. A second one that far behind is a device that began anew.
  bool note(std::uint32_t sequence, TimeNs now_ns, TimeNs window_ns) {
    const auto ahead = static_cast<std::int32_t>(sequence - highest_);
    const bool far_behind = started_ && ahead <= -window;
    if (far_behind && !std::exchange(stray_, true)) return false;
    stray_ = false;
    if (!started_ || ahead > jump_max || far_behind) {
      begin(sequence);
      sent_.add(now_ns, window_ns);
      received_.add(now_ns, window_ns);
      return true;
    }
    if (ahead > 0) {
      for (std::int32_t i = 1; i <= std::min(ahead, window); ++i) mark(highest_ + static_cast<std::uint32_t>(i), false);
      highest_ = sequence;
      sent_.add(now_ns, window_ns, ahead);
    } else if (marked(sequence)) {
      return false;
    }
    mark(sequence, true);
    received_.add(now_ns, window_ns);
    return true;
  }

  /// The device started anew: its numbers say nothing about those before.
  void forget() { started_ = false; }

  /// Share of the packets sent over the window that did not arrive, 0 to 1.
  [[nodiscard]] double missing_share(TimeNs now_ns, TimeNs window_ns) {
    const double sent = sent_.total(now_ns, window_ns);
    const double received = received_.total(now_ns, window_ns);
    return sent > 0.0 ? std::max(0.0, 1.0 - received / sent) : 0.0;
  }

  template <class Archive>
  void fields(Archive& archive) {
    archive(seen_, highest_, started_, stray_, sent_, received_);
  }

 private:
  static constexpr std::int32_t window = 256;
  static constexpr std::int32_t jump_max = 4096;  ///< a larger step is a new start, not a loss

  void begin(std::uint32_t sequence) {
    started_ = true;
    seen_.fill(0);
    // What came before the first packet is unknown, not missing: count it as seen from here on only.
    highest_ = sequence;
    mark(sequence, true);
  }
  void mark(std::uint32_t sequence, bool seen) {
    std::uint64_t& word = seen_[(sequence / 64) % seen_.size()];
    const std::uint64_t bit = 1ULL << (sequence % 64);
    word = seen ? word | bit : word & ~bit;
  }
  [[nodiscard]] bool marked(std::uint32_t sequence) const {
    return ((seen_[(sequence / 64) % seen_.size()] >> (sequence % 64)) & 1U) != 0;
  }

  std::array<std::uint64_t, window / 64> seen_{};
  std::uint32_t highest_ = 0;
  bool started_ = false;
  bool stray_ = false;  ///< the packet before this one lay far behind
  RateWindow sent_;
  RateWindow received_;
};

}  // namespace kedge::pipeline
