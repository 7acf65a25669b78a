// Does the tag drive straight, and at a steady speed? Only then a parabola through squared ranges means
// its speed now.
//
// Heading from the gyroscope and forward speed gained from the accelerometer are kept for some seconds; motion is
// straight, or steady, while their span over a window stays below a limit (MATHEMATICS.md, eq. 14).
#pragma once

#include <algorithm>

#include "core/ring.h"
#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

class MotionHistory {
 public:
  static constexpr double turn_max_rad = radians(5.0);
  static constexpr double gain_max_mps = 0.3;
  /// What a tilt error may feign, m/s2.
  static constexpr double gain_rate_max_mps2 = 0.08;

  /// turned_rad: heading from the gyroscope alone, unwrapped; gained_mps: integral of the forward acceleration.
  /// Calls in order of time.
  void add(TimeNs time_ns, double turned_rad, double gained_mps) {
    if (!moments_.empty() && time_ns - moments_.back().time_ns < spacing_ns) return;
    moments_.push_back({time_ns, turned_rad, gained_mps});
  }

  /// Largest minus smallest heading since `from_ns`, radians; 0 where nothing is known.
  [[nodiscard]] double turn_span_rad(TimeNs from_ns) const { return span(from_ns, &Moment::turned_rad); }
  [[nodiscard]] double gain_span_mps(TimeNs from_ns) const { return span(from_ns, &Moment::gained_mps); }

  [[nodiscard]] bool straight(TimeNs from_ns) const { return turn_span_rad(from_ns) < turn_max_rad; }
  [[nodiscard]] bool steady(TimeNs from_ns) const {
    if (moments_.empty()) return true;
    const double window_s = seconds(moments_.back().time_ns - from_ns);
    return gain_span_mps(from_ns) < gain_max_mps + gain_rate_max_mps2 * window_s;
  }

  template <class Archive>
  void fields(Archive& archive) {
    archive(moments_);
  }

 private:
  struct Moment {
    TimeNs time_ns = 0;
    double turned_rad = 0.0;
    double gained_mps = 0.0;

    template <class Archive>
    void fields(Archive& archive) {
      archive(time_ns, turned_rad, gained_mps);
    }
  };
  static constexpr TimeNs spacing_ns = 100 * ns_per_ms;

  [[nodiscard]] double span(TimeNs from_ns, double Moment::*part) const {
    double low = 0.0;
    double high = 0.0;
    bool any = false;
    for (std::size_t i = moments_.size(); i-- > 0 && moments_[i].time_ns >= from_ns;) {
      const double value = moments_[i].*part;
      low = any ? std::min(low, value) : value;
      high = any ? std::max(high, value) : value;
      any = true;
    }
    return high - low;
  }

  Ring<Moment, 80> moments_;
};

}  // namespace kedge::fusion
