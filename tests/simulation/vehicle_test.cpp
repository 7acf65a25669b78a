// The truth is a motion that can be: positions, velocities, attitudes and what the inertial unit feels
// belong together, and no vehicle is asked for more than a vehicle can do.
#include <catch2/catch.hpp>
#include <cmath>
#include <numbers>

#include "simulation/sensors.h"
#include "simulation/vehicle.h"

using namespace kedge;
using namespace kedge::simulation;

namespace {

Faults only_ground() {
  const Faults usual;
  Faults faults = Faults::none();
  faults.terrain_tilt_rad = usual.terrain_tilt_rad;
  faults.slip_rad = usual.slip_rad;
  return faults;
}

/// Strapdown integration by the trapezoidal rule from the true start; the largest position error.
double integrated_error_m(const ScenarioSpec& spec) {
  const Vehicle vehicle(spec);
  const Truth start = vehicle.at(spec.start_ns);
  const Vector3 gravity_mps2 = -spec.site.gravity_mps2 * Vector3::UnitZ();
  Quaternion q = start.q_body_to_site;
  Vector3 velocity_mps = start.velocity_mps - q * start.angular_rate_radps.cross(spec.antenna_in_body_m);
  Vector3 unit_m = start.position_m - q * spec.antenna_in_body_m;
  std::optional<fusion::InertialMeasurement> last;
  double worst_m = 0.0;
  const double dt_s = 1.0 / spec.inertial_rate_hz;
  for (const fusion::Measurement& measurement : measurements_of(spec)) {
    const auto* now = std::get_if<fusion::InertialMeasurement>(&measurement.body);
    if (now == nullptr) continue;
    if (last) {
      const Vector3 before_mps2 = q * last->specific_force_mps2 + gravity_mps2;
      q = (q * rotation_exp(0.5 * dt_s * (last->angular_rate_radps + now->angular_rate_radps))).normalized();
      const Vector3 after_mps2 = q * now->specific_force_mps2 + gravity_mps2;
      const Vector3 next_mps = velocity_mps + 0.5 * dt_s * (before_mps2 + after_mps2);
      unit_m += 0.5 * dt_s * (velocity_mps + next_mps);
      velocity_mps = next_mps;
    }
    last = *now;
    const Vector3 antenna_m = unit_m + q * spec.antenna_in_body_m;
    worst_m = std::max(worst_m, (antenna_m - vehicle.at(measurement.time_ns).position_m).norm());
  }
  return worst_m;
}

}  // namespace

TEST_CASE("velocity and acceleration are the derivatives of the position") {
  for (const Scenario scenario : scenarios) {
    INFO(name_of(scenario));
    const ScenarioSpec spec = spec_of(scenario, 4);
    const Vehicle vehicle(spec);
    for (double t_s = 0.5; t_s < 110.0; t_s += 0.731) {
      const TimeNs t_ns = spec.start_ns + from_seconds(t_s);
      const TimeNs h_ns = 1 * ns_per_ms;
      const Truth before = vehicle.at(t_ns - h_ns);
      const Truth here = vehicle.at(t_ns);
      const Truth after = vehicle.at(t_ns + h_ns);
      INFO("t " << t_s << " s");
      const double span_s = 2.0 * seconds(h_ns);
      CHECK(((after.position_m - before.position_m) / span_s - here.velocity_mps).norm() < 2e-5);
      CHECK(((after.velocity_mps - before.velocity_mps) / span_s - here.acceleration_mps2).norm() < 2e-5);
    }
  }
}

TEST_CASE("what the inertial unit feels, integrated, is the path") {
  for (const Scenario scenario : scenarios) {
    INFO(name_of(scenario));
    ScenarioSpec spec = spec_of(scenario, 9);
    spec.faults = only_ground();
    spec.duration_s = 60.0;
    spec.inertial_rate_hz = 500.0;
    spec.antenna_in_body_m = {0.3, -0.1, 0.6};
    spec.q_sensor_to_body = from_roll_pitch_yaw(std::numbers::pi, 0.05, -0.7);
    // The trapezoidal rule errs by dt^2 / 12 x jerk: under 1e-5 m/s2, 0.02 m after 60 s.
    CHECK(integrated_error_m(spec) < 0.03);
  }
}

TEST_CASE("a resting level tag feels gravity upwards and the field to the north and down") {
  ScenarioSpec spec = spec_of(Scenario::triangle, 1);
  spec.faults = Faults::none();
  spec.samples_per_packet = 1;
  spec.placement.heading_rad = radians(90.0 - 3.0);  // pointing to magnetic north, 3 degrees east of true
  Sensors sensors(spec);
  const auto first = std::get<InertialReading>(sensors.next()->body);
  CHECK((first.specific_force_mps2 - Vector3(0, 0, spec.site.gravity_mps2)).norm() < 1e-12);
  CHECK(first.angular_rate_radps.norm() < 1e-12);
  REQUIRE(first.magnetic_field_ut);
  const Vector3 field_ut = *first.magnetic_field_ut;
  CHECK(field_ut.norm() == Approx(48.5));
  CHECK(field_ut.y() == Approx(0.0).margin(1e-9));
  CHECK(degrees(std::atan2(-field_ut.z(), field_ut.x())) == Approx(65.0));
}

TEST_CASE("wheeled tags point where they go, up to slip") {
  for (const Scenario scenario : {Scenario::straight, Scenario::triangle, Scenario::rows, Scenario::stop_and_go}) {
    const ScenarioSpec spec = spec_of(scenario, 11);
    const Vehicle vehicle(spec);
    double squares = 0.0;
    int count = 0;
    for (double t_s = 0.0; t_s < spec.duration_s; t_s += 0.1) {
      const Truth truth = vehicle.at(spec.start_ns + from_seconds(t_s));
      if (truth.velocity_mps.head<2>().norm() < 0.5) continue;
      const double course_rad = std::atan2(truth.velocity_mps.y(), truth.velocity_mps.x());
      const double slip_rad = wrap_angle(course_rad - truth.heading_rad());
      CHECK(std::abs(slip_rad) < radians(2.0));
      // Nor do they fly or dig: the velocity lies in the vehicle's floor.
      const Vector3 in_body = truth.q_body_to_site.conjugate() * truth.velocity_mps;
      CHECK(std::abs(in_body.z()) < 0.005);
      squares += slip_rad * slip_rad;
      ++count;
    }
    // Few waves pass in one run, so the figure of one run scatters.
    CHECK(degrees(std::sqrt(squares / count)) == Approx(0.5).margin(0.3));
  }
}

TEST_CASE("no vehicle is asked for more than it can do") {
  for (const Scenario scenario : scenarios) {
    INFO(name_of(scenario));
    const ScenarioSpec spec = spec_of(scenario, 2);
    const Vehicle vehicle(spec);
    double farthest_m = 0.0;
    double nearest_m = 1e9;
    for (double t_s = 0.0; t_s < spec.duration_s; t_s += 0.05) {
      const Truth truth = vehicle.at(spec.start_ns + from_seconds(t_s));
      // A third of gravity and a quarter turn a second: brisk for a cart, easy for a flyer.
      CHECK(truth.acceleration_mps2.norm() < 3.3);
      CHECK(truth.angular_rate_radps.norm() < radians(90.0));
      farthest_m = std::max(farthest_m, truth.position_m.head<2>().norm());
      nearest_m = std::min(nearest_m, truth.position_m.head<2>().norm());
    }
    CHECK(farthest_m < 80.0);
    CHECK(nearest_m > 3.0);
  }
}

TEST_CASE("the courses are those that are named") {
  const auto point_at = [](Scenario scenario, double t_s) {
    ScenarioSpec spec = spec_of(scenario, 1);
    spec.faults = Faults::none();
    spec.rest_s = 3.0;
    return Vehicle(spec).at(spec.start_ns + from_seconds(t_s));
  };
  SECTION("three sides and three corners of the triangle lead back") {
    // After rest (3 s) and speeding up (3 s), a lap is three times 10 s of side and 4 s of corner.
    const Truth begin = point_at(Scenario::triangle, 6.0);
    const Truth end = point_at(Scenario::triangle, 6.0 + 3 * 14.0);
    CHECK((begin.position_m - end.position_m).norm() < 1e-9);
    CHECK(begin.velocity_mps.norm() == Approx(2.0));
    // A corner point comes nowhere near another: the sides are 20 m and what the corners add.
    CHECK((point_at(Scenario::triangle, 16.0).position_m - begin.position_m).norm() == Approx(20.0));
  }
  SECTION("the next row is 4 m further") {
    const Truth first = point_at(Scenario::rows, 3.0 + 2.5 + 10.0);
    CHECK(first.velocity_mps.norm() == Approx(1.5));
    // 40 m at 1.5 m/s, a half turn, and as far back as the first point was from the turn.
    const double turned_s = 3.0 + 2.5 + 40.0 / 1.5;
    double back_s = turned_s;
    while (point_at(Scenario::rows, back_s).velocity_mps.normalized().dot(first.velocity_mps.normalized()) >
           -1.0 + 1e-12) {
      back_s += 0.01;
    }
    const Vector2 across(-std::sin(first.heading_rad()), std::cos(first.heading_rad()));
    const Truth second = point_at(Scenario::rows, back_s + 5.0);
    CHECK(std::abs(across.dot((second.position_m - first.position_m).head<2>())) == Approx(4.0).margin(1e-6));
  }
  SECTION("stop-and-go stops") {
    int halts = 0;
    bool resting = true;
    for (double t_s = 3.5; t_s < 120.0; t_s += 0.1) {
      const bool rests = point_at(Scenario::stop_and_go, t_s).velocity_mps.norm() == 0.0;
      halts += rests && !resting ? 1 : 0;
      resting = rests;
    }
    CHECK(halts >= 5);
  }
  SECTION("the flyer climbs and its nose is free") {
    const Truth truth = point_at(Scenario::flight, 40.0);
    CHECK(truth.position_m.z() > 5.0);
    double widest_rad = 0.0;
    for (double t_s = 12.0; t_s < 110.0; t_s += 1.0) {
      const Truth t = point_at(Scenario::flight, t_s);
      widest_rad = std::max(widest_rad,
                            std::abs(wrap_angle(std::atan2(t.velocity_mps.y(), t.velocity_mps.x()) - t.heading_rad())));
    }
    CHECK(degrees(widest_rad) > 45.0);
  }
}

TEST_CASE("a known start is off by what its sigmas say") {
  double squares = 0.0;
  double heading_squares = 0.0;
  constexpr int runs = 400;
  for (int run = 0; run < runs; ++run) {
    ScenarioSpec spec = spec_of(Scenario::triangle, static_cast<std::uint64_t>(run));
    spec.faults = Faults::none();
    spec.duration_s = 1.0;
    const fusion::Tag tag = tag_of(spec, true);
    const Truth truth = Vehicle(spec).at(spec.start_ns);
    REQUIRE(tag.start);
    squares += (tag.start->position_m - truth.position_m.head<2>()).squaredNorm();
    heading_squares += std::pow(wrap_angle(*tag.start->heading_rad - truth.heading_rad()), 2);
  }
  // Sums over 800 and 400 degrees of freedom: four sigma are 4 sqrt(2 / n).
  CHECK(squares / (2 * runs) == Approx(0.25).epsilon(4.0 * std::sqrt(2.0 / 800.0)));
  CHECK(heading_squares / runs == Approx(std::pow(radians(5.0), 2)).epsilon(4.0 * std::sqrt(2.0 / 400.0)));
  CHECK_FALSE(tag_of(spec_of(Scenario::triangle, 1), false).start);
}
