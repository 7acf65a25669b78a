// The line along the lower edge of a cloud of delays.
//
// Points are (device time, arrival minus device time). Quick packets lie on the edge, all others above.
// A bounded window keeps the lowest point of each second of device time; the line is the one below all
// of them that is closest to them: the edge of their lower convex hull over the middle of the window
// (Moon, Skelly, Towsley, INFOCOM 1999). Between two fits, a point below the line pulls it down at once.
#pragma once

#include <cstddef>
#include <cstdint>

#include "core/ring.h"

namespace kedge::clock {

class Envelope {
 public:
  /// Adds a point: device time in us, delay in ns, both from any fixed origin. A reordered point that
  /// belongs to a second already over pulls the line down too, but is not kept for the fits.
  void add(std::int64_t device_us, std::int64_t delay_ns);

  /// Forgets all points and keeps the slope: it belongs to the crystal, not to the counter's origin.
  void restart();

  /// Height of the line in ns. Precondition: a point was added.
  [[nodiscard]] double at(std::int64_t device_us) const;

  /// Seconds of delay gained per second of device time: negative means the device runs fast.
  [[nodiscard]] double slope() const { return slope_; }

  /// How well the height is known, ns, one sigma.
  [[nodiscard]] double sigma_ns() const;

  /// Completed seconds in the window.
  [[nodiscard]] std::size_t seconds() const { return lowest_.size(); }

  /// State visitor, see core/archive.h.
  template <class Archive>
  void fields(Archive& archive) {
    archive(lowest_, open_, empty_, origin_us_, height_ns_, slope_, slope_prior_, scatter_ns_);
  }

 private:
  struct Point {
    std::int64_t device_us = 0;
    std::int64_t delay_ns = 0;

    template <class Archive>
    void fields(Archive& archive) {
      archive(device_us, delay_ns);
    }
  };
  static constexpr std::size_t window_s = 128;

  [[nodiscard]] double above_line(const Point& point) const;
  void fit();
  /// Slope of the hull's edge over the mean device time of the window.
  [[nodiscard]] double hull_slope() const;

  Ring<Point, window_s> lowest_;  ///< of each completed second, oldest first
  Point open_;                    ///< of the second that is not over yet
  bool empty_ = true;
  std::int64_t origin_us_ = 0;  ///< where the line has height_ns_
  double height_ns_ = 0.0;
  double slope_ = 0.0;
  double slope_prior_ = 0.0;  ///< from the last long window
  double scatter_ns_ = 0.0;   ///< mean distance of the lowest points from the line
};

}  // namespace kedge::clock
