// Watches over one anchor: a silent one is said once, not once for every tag.
#pragma once

#include <algorithm>
#include <cstdint>
#include <optional>
#include <vector>

#include "pipeline/concerns.h"
#include "pipeline/rate_window.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"

namespace kedge::pipeline {

class AnchorWatch {
 public:
  /// `limits` must outlive the watch.
  AnchorWatch(const Limits& limits, std::size_t tags) : limits_(limits), heard_by_ns_(tags) {}

  void heard(std::uint32_t tag, TimeNs arrival_ns) {
    rate_.add(arrival_ns, limits_.rate_window_ns);
    heard_by_ns_.at(tag) = arrival_ns;
    heard_ns_ = arrival_ns;
  }

  /// `tags_alive`: some tag is sending, so ranges would come if the anchor answered. `since_ns`: the first
  /// tick, before which nothing could be heard. Returns whether anything changed.
  bool update(bool tags_alive, TimeNs since_ns, TimeNs now_ns) {
    const TimeNs age_ns = now_ns - heard_ns_.value_or(since_ns);
    concerns_.note(Concern::anchor_silent, tags_alive && age_ns > limits_.anchor_silent_ns, seconds(age_ns), now_ns,
                   {0, 0});
    return concerns_.take_changed();
  }
  [[nodiscard]] bool silent() const { return concerns_.raised(Concern::anchor_silent); }

  [[nodiscard]] AnchorHealthReport report(std::uint32_t anchor, TimeNs now_ns) {
    AnchorHealthReport report;
    report.anchor = anchor;
    report.time_ns = now_ns;
    report.concerns = concerns_.list();
    report.range_rate_hz = rate_.rate_hz(now_ns, limits_.rate_window_ns);
    report.tags_heard = static_cast<std::uint32_t>(std::count_if(
        heard_by_ns_.begin(), heard_by_ns_.end(),
        [&](const std::optional<TimeNs>& at_ns) { return at_ns && now_ns - *at_ns <= limits_.rate_window_ns; }));
    if (heard_ns_) report.age_s = seconds(std::max<TimeNs>(now_ns - *heard_ns_, 0));
    return report;
  }

  template <class Archive>
  void fields(Archive& archive) {
    for (std::optional<TimeNs>& at_ns : heard_by_ns_) archive(at_ns);
    archive(concerns_, rate_, heard_ns_);
  }

 private:
  const Limits& limits_;
  ConcernBook concerns_;
  RateWindow rate_;
  std::vector<std::optional<TimeNs>> heard_by_ns_;
  std::optional<TimeNs> heard_ns_;
};

}  // namespace kedge::pipeline
