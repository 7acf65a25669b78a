// The recent ranges of one anchor, and the speed that their shape tells on its own.
//
// Independent of any position filter but for height and range bias, so that the filter's speed can be held
// against it (MATHEMATICS.md, eq. 16 to 24 and 46).
#pragma once

#include <cstdint>
#include <optional>

#include "fusion/measurement.h"
#include "fusion/motion_history.h"
#include "fusion/range_speed.h"

namespace kedge::fusion {

/// Speed from the ranges of a window alone.
struct WindowSpeed {
  TimeNs time_ns = 0;
  double speed_mps = 0.0;
  double sigma_mps = 0.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, speed_mps, sigma_mps);
  }
};

class SpeedCheck {
 public:
  /// The tag has moved for dt_s along this unit vector; not called at rest.
  void extend(const Vector2& direction, double dt_s) { path_s_ += dt_s * direction; }

  /// straight_m: slant range, bias removed; height_m: antenna above the anchor.
  void add(TimeNs time_ns, const RangeMeasurement& range, double straight_m, double height_m);

  /// Solves the window every half second. course_known: the path is the heading's.
  void solve(TimeNs time_ns, const MotionHistory& motion, double range_bias_sigma_m, double speed_max_mps,
             bool course_known);

  /// Rate of change of the range over the last 1.5 s, of more where ranges are rare.
  [[nodiscard]] std::optional<RangeRate> rate(TimeNs time_ns) const;
  [[nodiscard]] bool heard(TimeNs time_ns) const;
  /// Median level range of the last second; none without ranges.
  [[nodiscard]] std::optional<double> level_range_m(TimeNs time_ns) const;
  /// Newest solution not older than 2 s.
  [[nodiscard]] std::optional<WindowSpeed> speed(TimeNs time_ns) const;
  [[nodiscard]] std::optional<double> ring_radius_m() const { return ring_radius_m_; }
  [[nodiscard]] std::uint32_t anchor() const { return anchor_; }
  void clear() { window_.clear(); }

  template <class Archive>
  void fields(Archive& archive) {
    archive(path_s_, window_, anchor_, ring_radius_m_, tried_ns_, speed_);
  }

 private:
  [[nodiscard]] std::optional<WindowSpeed> solved(std::size_t first, bool straight) const;

  Vector2 path_s_ = Vector2::Zero();
  RangeWindow window_;
  std::uint32_t anchor_ = 0;
  std::optional<double> ring_radius_m_;
  TimeNs tried_ns_ = 0;
  std::optional<WindowSpeed> speed_;
};

}  // namespace kedge::fusion
