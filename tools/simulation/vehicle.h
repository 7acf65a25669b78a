// The truth: where the tag is, how it moves and how it lies, at any time.
//
// A wheeled tag points where it goes up to slip and follows the ground: its height and pitch are those
// of a gently rolling terrain. A flyer leans into its acceleration and turns its nose as it likes.
#pragma once

#include "core/rotation.h"
#include "core/time.h"
#include "simulation/path.h"
#include "simulation/scenario.h"
#include "simulation/wander.h"

namespace kedge::simulation {

/// Of the tag's reference point, the range antenna. Site axes unless said otherwise.
struct Truth {
  TimeNs time_ns = 0;
  Vector3 position_m = Vector3::Zero();
  Vector3 velocity_mps = Vector3::Zero();
  Vector3 acceleration_mps2 = Vector3::Zero();
  Quaternion q_body_to_site = Quaternion::Identity();
  Vector3 angular_rate_radps = Vector3::Zero();  ///< body axes
  bool moving = false;

  [[nodiscard]] double heading_rad() const { return heading_of(q_body_to_site); }
};

class Vehicle {
 public:
  explicit Vehicle(const ScenarioSpec& spec);

  [[nodiscard]] Truth at(TimeNs time_ns) const;
  /// Acceleration of the inertial unit, site axes, gravity not included.
  [[nodiscard]] Vector3 inertial_unit_acceleration_mps2(TimeNs time_ns) const;

 private:
  struct Pose {
    PathPoint path;
    Quaternion q_body_to_site;
  };
  [[nodiscard]] Pose pose_at(double t_s) const;
  [[nodiscard]] Quaternion wheeled_attitude(const PathPoint& p) const;
  [[nodiscard]] Quaternion flyer_attitude(const PathPoint& p, double t_s) const;

  TimeNs start_ns_;
  bool flies_;
  double gravity_mps2_;
  double antenna_up_m_;
  Vector3 antenna_in_body_m_;
  Path path_;
  Wander ground_slope_;  ///< rise over run, along the distance travelled
  Wander roll_rad_;
  Wander slip_rad_;
  Wander yaw_rad_;  ///< nose away from course, over time
};

}  // namespace kedge::simulation
