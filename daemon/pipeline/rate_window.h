// Rates over the last seconds from a few buckets: no list of events, no allocation.
#pragma once

#include <algorithm>
#include <array>
#include <cstdint>

#include "core/time.h"

namespace kedge::pipeline {

/// Counts events over a sliding window in ten steps; the figure covers nine whole steps and the open one.
class RateWindow {
 public:
  void add(TimeNs now_ns, TimeNs window_ns, double amount = 1.0) {
    advance(now_ns, window_ns);
    bucket(step_) += amount;
  }

  /// Sum over the window that ends at `now_ns`.
  [[nodiscard]] double total(TimeNs now_ns, TimeNs window_ns) {
    if (!started_) return 0.0;
    advance(now_ns, window_ns);
    double sum = 0.0;
    for (const double amount : buckets_) sum += amount;
    return sum;
  }

  /// Events per second over the time the buckets really cover.
  [[nodiscard]] double rate_hz(TimeNs now_ns, TimeNs window_ns) {
    const double sum = total(now_ns, window_ns);
    const TimeNs width_ns = window_ns / steps;
    const TimeNs covered_ns = std::min((steps - 1) * width_ns + (now_ns - step_ * width_ns), now_ns - first_ns_);
    // Under half a second a rate is noise; the first events would read as thousands a second.
    return sum / std::max(seconds(covered_ns), 0.5);
  }

  template <class Archive>
  void fields(Archive& archive) {
    archive(buckets_, step_, first_ns_, started_);
  }

 private:
  static constexpr std::int64_t steps = 10;

  double& bucket(std::int64_t step) { return buckets_[static_cast<std::size_t>(((step % steps) + steps) % steps)]; }

  void advance(TimeNs now_ns, TimeNs window_ns) {
    const TimeNs width_ns = window_ns / steps;
    const std::int64_t step = now_ns / width_ns - (now_ns % width_ns < 0 ? 1 : 0);
    if (!started_) {
      started_ = true;
      first_ns_ = now_ns;
      step_ = step;
    }
    for (std::int64_t i = 1; i <= std::min(step - step_, steps); ++i) bucket(step_ + i) = 0.0;
    step_ = std::max(step_, step);
  }

  std::array<double, steps> buckets_{};
  std::int64_t step_ = 0;
  TimeNs first_ns_ = 0;
  bool started_ = false;
};

}  // namespace kedge::pipeline
