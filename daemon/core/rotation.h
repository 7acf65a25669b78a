// Rotations: unit quaternions (w, x, y, z), body to site, and headings.
//
// A heading is in radians from site east, counter-clockwise seen from above, of the body x axis.
// Sources: Sola, Quaternion kinematics for the error-state Kalman filter, 2017, sections 2 and 4.
#pragma once

#include <Eigen/Core>
#include <Eigen/Geometry>
#include <cmath>
#include <numbers>

namespace kedge {

using Vector2 = Eigen::Vector2d;
using Vector3 = Eigen::Vector3d;
using Matrix2 = Eigen::Matrix2d;
using Matrix3 = Eigen::Matrix3d;
using Quaternion = Eigen::Quaterniond;

inline constexpr double radians_per_degree = std::numbers::pi / 180.0;

constexpr double radians(double angle_deg) { return angle_deg * radians_per_degree; }
constexpr double degrees(double angle_rad) { return angle_rad / radians_per_degree; }

/// The same angle in (-pi, pi].
inline double wrap_angle(double angle_rad) {
  const double wrapped = std::remainder(angle_rad, 2.0 * std::numbers::pi);
  return wrapped <= -std::numbers::pi ? std::numbers::pi : wrapped;
}

/// Heading of a bearing (from true north, clockwise), in (-pi, pi]; site_bearing_rad is where the site's
/// y axis points.
inline double heading_from_bearing(double bearing_rad, double site_bearing_rad) {
  return wrap_angle(site_bearing_rad + 0.5 * std::numbers::pi - bearing_rad);
}

/// Bearing of a heading, in [0, 2 pi); inverse of heading_from_bearing.
inline double bearing_from_heading(double heading_rad, double site_bearing_rad) {
  const double bearing = wrap_angle(site_bearing_rad + 0.5 * std::numbers::pi - heading_rad);
  return bearing < 0.0 ? bearing + 2.0 * std::numbers::pi : bearing;
}

/// Rotation by |v| radians about v: exp of half the pure quaternion (Sola 2017, eq. 101).
inline Quaternion rotation_exp(const Vector3& v_rad) {
  const double angle_rad = v_rad.norm();
  // Below 1e-4 rad the next series term is under 1e-17: the double cannot see it.
  const double half_sinc =
      angle_rad < 1e-4 ? 0.5 - angle_rad * angle_rad / 48.0 : std::sin(0.5 * angle_rad) / angle_rad;
  Quaternion q;
  q.w() = std::cos(0.5 * angle_rad);
  q.vec() = half_sinc * v_rad;
  return q.normalized();
}

/// The rotation vector in radians, norm at most pi; inverse of rotation_exp. q must be unit.
inline Vector3 rotation_log(const Quaternion& q_in) {
  const double sign = q_in.w() < 0.0 ? -1.0 : 1.0;  // q and -q are one rotation: take the short way
  const Vector3 v = sign * q_in.vec();
  const double w = sign * q_in.w();
  const double s = v.norm();
  if (s < 1e-8) return 2.0 * v / w;
  return 2.0 * std::atan2(s, w) / s * v;
}

/// Cross-product matrix: skew(a) * b = a x b.
inline Matrix3 skew(const Vector3& a) {
  Matrix3 m;
  m << 0, -a.z(), a.y(), a.z(), 0, -a.x(), -a.y(), a.x(), 0;
  return m;
}

/// Heading of the body x axis; meaningless (but finite) when x points straight up or down.
inline double heading_of(const Quaternion& q_body_to_site) {
  const Vector3 forward = q_body_to_site * Vector3::UnitX();
  return std::atan2(forward.y(), forward.x());
}

/// Level attitude with the given heading.
inline Quaternion level_attitude(double heading_rad) {
  return Quaternion(Eigen::AngleAxisd(heading_rad, Vector3::UnitZ()));
}

/// Rotation about fixed x, then y, then z axes (roll, pitch, yaw), radians.
inline Quaternion from_roll_pitch_yaw(double roll_rad, double pitch_rad, double yaw_rad) {
  return Quaternion(Eigen::AngleAxisd(yaw_rad, Vector3::UnitZ()) * Eigen::AngleAxisd(pitch_rad, Vector3::UnitY()) *
                    Eigen::AngleAxisd(roll_rad, Vector3::UnitX()));
}

}  // namespace kedge
