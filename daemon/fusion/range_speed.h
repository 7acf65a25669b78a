// Speed from nothing but ranges: what the published method adds to a plain filter.
//
// At constant velocity the squared range to a fixed point is a parabola in time,
//     r^2(t) = |p|^2 + 2 p.v t + |v|^2 t^2,
// so that three ranges give distance, speed and along-track position in closed form; a weighted least-squares
// parabola over a window does it better. Where the gyroscope tells the shape of the path, time may be
// replaced by the path A of unit speed,
//     r^2 = |p|^2 + 2 s p.A + s^2 |A|^2,
// which needs no straight course. All ranges here are level: slant reduced by the height difference.
// Positions are relative to the anchor. MATHEMATICS.md, eq. 16 to 24.
#pragma once

#include <array>
#include <cstddef>
#include <optional>

#include "core/ring.h"
#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

/// One level range, and where a tag at 1 m/s would be by then.
struct RangePoint {
  TimeNs time_ns = 0;
  double range_m = 0.0;
  double sigma_m = 0.0;
  Vector2 path_s = Vector2::Zero();  ///< integral of the unit heading, seconds (metres at 1 m/s)

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, range_m, sigma_m, path_s);
  }
};

using RangeWindow = Ring<RangePoint, 128>;

/// What a straight window tells, at the time of its newest point.
struct StraightSpeed {
  double distance_m = 0.0;  ///< |p|
  double speed_mps = 0.0;   ///< |v|, not negative
  double along_m = 0.0;     ///< p.v / |v|: positive once past the nearest point
  double distance_sigma_m = 0.0;
  double speed_sigma_mps = 0.0;
  double along_sigma_m = 0.0;
  double chi_square = 0.0;  ///< per degree of freedom; 1 where the model holds. 0 for three points
};

/// The closed form from three ranges in order of time (eq. 17). None where times coincide or the squared speed
/// comes out not positive.
[[nodiscard]] std::optional<StraightSpeed> three_range_speed(const std::array<RangePoint, 3>& points);

/// The weighted least-squares parabola through the points from index `first` on (eq. 19); none below 5 points.
[[nodiscard]] std::optional<StraightSpeed> least_squares_speed(const RangeWindow& window, std::size_t first);

/// A position and speed that a window allows, heading taken as given.
struct ShapedFit {
  Vector2 position_m = Vector2::Zero();  ///< level, from the anchor, at the newest point
  double speed_mps = 0.0;
  Matrix3 covariance = Matrix3::Zero();  ///< of (position, speed), ranges' noise alone
  double chi_square = 0.0;               ///< per degree of freedom
  double cost = 0.0;                     ///< half the sum of squared normalised residuals, robust
};

/// The gyro-shaped form (eq. 22): the best fit and, where a different one is a local minimum too, its mirror.
struct ShapedSpeed {
  ShapedFit best;
  std::optional<ShapedFit> mirror;
};
[[nodiscard]] std::optional<ShapedSpeed> shaped_speed(const RangeWindow& window, std::size_t first);

/// Rate of change of the range over the points from `first` on, m/s, and its sigma; none below 5 points.
struct RangeRate {
  double rate_mps = 0.0;
  double sigma_mps = 0.0;
};
[[nodiscard]] std::optional<RangeRate> range_rate(const RangeWindow& window, std::size_t first);

/// Index of the first point not older than from_ns.
[[nodiscard]] std::size_t first_since(const RangeWindow& window, TimeNs from_ns);

}  // namespace kedge::fusion
