#include "simulation/path.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>

#include "core/assert.h"

namespace kedge::simulation {

namespace {

double step(double u) { return u * u * u * (10.0 + u * (-15.0 + 6.0 * u)); }
double step_slope(double u) { return 30.0 * u * u * (1.0 - u) * (1.0 - u); }
double step_curvature(double u) { return 60.0 * u * (1.0 - u) * (1.0 - 2.0 * u); }
double step_integral(double u) { return u * u * u * u * (2.5 + u * (-3.0 + u)); }

Vector2 direction(double course_rad) { return {std::cos(course_rad), std::sin(course_rad)}; }

// Five-point Gauss-Legendre quadrature on [-1, 1]: Abramowitz and Stegun, table 25.4.
constexpr std::array<double, 5> nodes = {-0.906179845938664, -0.538469310105683, 0.0, 0.538469310105683,
                                         0.906179845938664};
constexpr std::array<double, 5> weights = {0.236926885056189, 0.478628670499366, 0.568888888888889, 0.478628670499366,
                                           0.236926885056189};

template <class Function>
auto integrate(Function f, double from, double to) {
  const double half = 0.5 * (to - from);
  auto sum = f(from);
  sum *= 0.0;
  for (std::size_t i = 0; i < nodes.size(); ++i) sum += weights[i] * half * f(from + half * (1.0 + nodes[i]));
  return sum;
}

// How far sideways a half turn of unit duration and speed leads.
double half_turn_width() {
  double width = 0.0;
  constexpr int parts = 20;
  for (int i = 0; i < parts; ++i) {
    width += integrate([](double u) { return std::sin(std::numbers::pi * step(u)); }, static_cast<double>(i) / parts,
                       static_cast<double>(i + 1) / parts);
  }
  return width;
}

}  // namespace

Vector2 Path::displacement(const Move& move, double u_from, double u_to) {
  const auto velocity = [&move](double u) -> Vector2 {
    const double speed_mps = move.speed_from_mps + (move.speed_to_mps - move.speed_from_mps) * step(u);
    return move.duration_s * speed_mps * direction(move.course_rad + move.turn_rad * step(u));
  };
  return integrate(velocity, u_from, u_to);
}

// Appends moves until the duration is reached.
class Path::Builder {
 public:
  Builder(const Placement& placement, std::vector<Move>& moves)
      : moves_(moves), position_m_(placement.start_m), course_rad_(placement.heading_rad), scale_(placement.scale) {}

  [[nodiscard]] double time_s() const { return time_s_; }

  void rest(double duration_s) { add(duration_s, 0.0, 0.0, 0.0); }
  void speed_up(double to_mps, double duration_s) { add(duration_s, to_mps, 0.0, 0.0); }
  void turn(double turn_rad, double duration_s, double climb_m = 0.0) {
    add(duration_s, speed_mps_, turn_rad, climb_m);
  }
  void straight(double length_m, double climb_m = 0.0) {
    add(length_m * scale_ / speed_mps_, speed_mps_, 0.0, climb_m);
  }
  void climb(double climb_m, double duration_s) { add(duration_s, speed_mps_, 0.0, climb_m); }
  /// To the neighbouring row, `width_m` to the left (negative: to the right).
  void half_turn(double width_m) {
    const double duration_s = std::abs(width_m) * scale_ / (speed_mps_ * half_turn_width());
    add(duration_s, speed_mps_, std::copysign(std::numbers::pi, width_m), 0.0);
  }

 private:
  void add(double duration_s, double speed_to_mps, double turn_rad, double climb_m) {
    if (duration_s <= 0.0) return;
    Move move{duration_s, speed_mps_,  speed_to_mps, turn_rad,  climb_m,
              time_s_,    course_rad_, travelled_m_, height_m_, {}};
    // A tenth of a second, or for straight moves the whole: there the quadrature is exact.
    const int steps = turn_rad == 0.0 ? 1 : std::max(1, static_cast<int>(std::ceil(duration_s / 0.1)));
    move.positions_m.push_back(position_m_);
    for (int i = 0; i < steps; ++i) {
      position_m_ += displacement(move, static_cast<double>(i) / steps, static_cast<double>(i + 1) / steps);
      move.positions_m.push_back(position_m_);
    }
    travelled_m_ += 0.5 * (speed_mps_ + speed_to_mps) * duration_s;
    height_m_ += climb_m;
    course_rad_ += turn_rad;
    time_s_ += duration_s;
    speed_mps_ = speed_to_mps;
    moves_.push_back(std::move(move));
  }

  std::vector<Move>& moves_;
  Vector2 position_m_;
  double course_rad_;
  double scale_;
  double speed_mps_ = 0.0;
  double time_s_ = 0.0;
  double travelled_m_ = 0.0;
  double height_m_ = 0.0;
};

Path::Path(Scenario scenario, const Placement& placement, double rest_s, double duration_s) {
  KEDGE_ASSERT(placement.scale > 0.0 && rest_s >= 0.0 && duration_s > 0.0);
  constexpr double right_angle = 0.5 * std::numbers::pi;
  Builder build(placement, moves_);
  build.rest(std::max(rest_s, 0.1));
  switch (scenario) {
    case Scenario::straight:
      build.speed_up(1.5, 2.5);
      while (build.time_s() < duration_s) {
        build.straight(40.0);
        build.turn(right_angle, 3.0);
        build.straight(15.0);
        build.turn(right_angle, 3.0);
      }
      break;
    case Scenario::triangle:
      build.speed_up(2.0, 3.0);
      while (build.time_s() < duration_s) {
        build.straight(20.0);
        build.turn(2.0 / 3.0 * std::numbers::pi, 4.0);
      }
      break;
    case Scenario::rows: {
      constexpr int rows = 6;
      build.speed_up(1.5, 2.5);
      // Half turns to alternate sides lead on to the next row; at the last row the field is worked back.
      double width_m = -4.0;
      for (int row = 1; build.time_s() < duration_s; ++row) {
        build.straight(40.0);
        build.half_turn(width_m);
        if (row % rows != 0) width_m = -width_m;
      }
      break;
    }
    case Scenario::stop_and_go:
      while (build.time_s() < duration_s) {
        build.speed_up(2.0, 3.0);
        build.straight(8.0);
        build.turn(right_angle, 3.0);
        build.straight(8.0);
        build.speed_up(0.0, 3.0);
        build.rest(6.0);
      }
      break;
    case Scenario::flight:
      build.climb(8.0, 6.0);
      build.speed_up(3.0, 3.0);
      while (build.time_s() < duration_s) {
        build.straight(12.0, 2.0);
        build.turn(2.0 * std::numbers::pi, 14.0, -3.0);
        build.straight(12.0, 3.0);
        build.turn(-2.0 * std::numbers::pi, 14.0, -2.0);
        build.turn(std::numbers::pi, 7.0);
      }
      break;
  }
}

PathPoint Path::at(double t_s) const {
  const auto after =
      std::upper_bound(moves_.begin(), moves_.end(), t_s, [](double t, const Move& move) { return t < move.begin_s; });
  const Move& move = after == moves_.begin() ? moves_.front() : *std::prev(after);
  const double u = std::clamp((t_s - move.begin_s) / move.duration_s, 0.0, 1.0);
  const double speed_change_mps = move.speed_to_mps - move.speed_from_mps;
  const double rate_hz = 1.0 / move.duration_s;

  PathPoint p;
  p.course_rad = move.course_rad + move.turn_rad * step(u);
  p.speed_mps = move.speed_from_mps + speed_change_mps * step(u);
  p.speed_rate_mps2 = speed_change_mps * step_slope(u) * rate_hz;
  p.travelled_m = move.travelled_m + move.duration_s * (move.speed_from_mps * u + speed_change_mps * step_integral(u));
  const double yaw_rate_radps = move.turn_rad * step_slope(u) * rate_hz;

  const auto steps = static_cast<double>(move.positions_m.size() - 1);
  const double step_index = std::min(std::floor(u * steps), steps - 1.0);
  const Vector2 level_m =
      move.positions_m[static_cast<std::size_t>(step_index)] + displacement(move, step_index / steps, u);
  const Vector2 along = direction(p.course_rad);
  const Vector2 left(-along.y(), along.x());
  p.position_m << level_m, move.height_m + move.climb_m * step(u);
  p.velocity_mps << p.speed_mps * along, move.climb_m * step_slope(u) * rate_hz;
  p.acceleration_mps2 << p.speed_rate_mps2 * along + p.speed_mps * yaw_rate_radps * left,
      move.climb_m * step_curvature(u) * rate_hz * rate_hz;
  return p;
}

}  // namespace kedge::simulation
