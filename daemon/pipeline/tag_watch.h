// Watches over one tag: what was heard of it, how firmly it stands, and what lowers trust in it.
//
// Every concern rests on one figure and one limit, stated beside it in tag_watch.cpp.
#pragma once

#include <cstdint>
#include <optional>

#include "fusion/estimate.h"
#include "pipeline/concerns.h"
#include "pipeline/rate_window.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"
#include "wire/packet.h"

namespace kedge::pipeline {

/// What the tag's device says at a tick, beside the estimate.
struct DeviceFigures {
  double missing_share = 0.0;
  bool clock_steady = true;
  double clock_sigma_s = 0.0;
  std::optional<double> clock_skew_ppm;
};

class TagWatch {
 public:
  /// All must outlive the watch.
  TagWatch(const fusion::Site& site, const TagSettings& tag, const Limits& limits)
      : site_(site), tag_(tag), limits_(limits) {}

  void heard_inertial(const wire::InertialBatch& batch, TimeNs arrival_ns);
  void heard_range(TimeNs arrival_ns);
  void heard_other(TimeNs arrival_ns) { heard_ns_ = arrival_ns; }
  void range_outcome(bool used, TimeNs arrival_ns);
  void refused_range() { ++ranges_refused_; }

  /// Brings standing and concerns up to `now_ns`. `anchors_silent`: no anchor is heard by any tag, which
  /// is said once for the anchor and not again for each tag. Returns whether anything changed.
  bool update(const fusion::Estimate& estimate, const DeviceFigures& device, bool anchors_silent, TimeNs now_ns);

  [[nodiscard]] Standing standing() const { return standing_; }
  [[nodiscard]] std::optional<double> radius_95_m() const { return radius_95_m_; }
  [[nodiscard]] bool hears_inertial(TimeNs now_ns) const;
  [[nodiscard]] TagHealthReport report(std::uint32_t tag, const DeviceFigures& device, std::uint32_t restarts,
                                       TimeNs now_ns);

  template <class Archive>
  void fields(Archive& archive) {
    archive(standing_, standing_since_ns_, radius_95_m_, concerns_, inertial_rate_, range_rate_, saturated_, heard_ns_,
            inertial_ns_, range_ns_, range_used_ns_, woken_ns_, clock_was_steady_, battery_v_, temperature_degc_,
            ranges_used_, ranges_refused_);
  }

 private:
  void update_standing(const fusion::Estimate& estimate, TimeNs now_ns);
  void note_input(const DeviceFigures& device, bool anchors_silent, TimeNs now_ns);
  void note_estimate(const fusion::Estimate& estimate, TimeNs now_ns);

  const fusion::Site& site_;
  const TagSettings& tag_;
  const Limits& limits_;

  Standing standing_ = Standing::silent;
  TimeNs standing_since_ns_ = 0;
  std::optional<double> radius_95_m_;
  ConcernBook concerns_;
  RateWindow inertial_rate_;
  RateWindow range_rate_;
  RateWindow saturated_;
  std::optional<TimeNs> heard_ns_;
  std::optional<TimeNs> inertial_ns_;
  std::optional<TimeNs> range_ns_;
  std::optional<TimeNs> range_used_ns_;
  TimeNs woken_ns_ = 0;            ///< when it was last no longer silent
  bool clock_was_steady_ = false;  ///< since then
  std::optional<double> battery_v_;
  std::optional<double> temperature_degc_;
  std::uint64_t ranges_used_ = 0;
  std::uint64_t ranges_refused_ = 0;
};

}  // namespace kedge::pipeline
