// The course a scenario drives: level motion made of moves with smooth ends.
//
// Speed, course and height of each move follow the step 10 u^3 - 15 u^4 + 6 u^5, so that acceleration
// and yaw rate are continuous and stay physical. Positions are integrals of the velocity to rounding,
// so that inertial samples made from them are consistent with them.
#pragma once

#include <vector>

#include "core/rotation.h"
#include "simulation/scenario.h"

namespace kedge::simulation {

struct PathPoint {
  Vector3 position_m = Vector3::Zero();  ///< site axes, z from the path's own zero
  Vector3 velocity_mps = Vector3::Zero();
  Vector3 acceleration_mps2 = Vector3::Zero();
  double course_rad = 0.0;   ///< from site east; kept through halts
  double travelled_m = 0.0;  ///< level distance since the start
  double speed_mps = 0.0;    ///< level
  double speed_rate_mps2 = 0.0;
};

class Path {
 public:
  Path(Scenario scenario, const Placement& placement, double rest_s, double duration_s);

  /// At t_s seconds after the start; the ends continue by standing still.
  [[nodiscard]] PathPoint at(double t_s) const;

 private:
  struct Move {
    double duration_s = 0.0;
    double speed_from_mps = 0.0;
    double speed_to_mps = 0.0;
    double turn_rad = 0.0;
    double climb_m = 0.0;
    // Where it begins.
    double begin_s = 0.0;
    double course_rad = 0.0;
    double travelled_m = 0.0;
    double height_m = 0.0;
    std::vector<Vector2> positions_m;  ///< at equal steps; the first is the beginning
  };
  class Builder;

  static Vector2 displacement(const Move& move, double u_from, double u_to);

  std::vector<Move> moves_;
};

}  // namespace kedge::simulation
