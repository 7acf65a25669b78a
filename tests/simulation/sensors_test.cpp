// Sensors are as wrong as their figures say: every statistic lies within four sigma of what it should be.
#include <catch2/catch.hpp>
#include <cmath>
#include <vector>

#include "simulation/sensors.h"

using namespace kedge;
using namespace kedge::simulation;

namespace {

struct Statistics {
  double mean = 0.0;
  double sigma = 0.0;
  double n = 0.0;
};

Statistics statistics_of(const std::vector<double>& values) {
  Statistics s;
  s.n = static_cast<double>(values.size());
  for (const double value : values) s.mean += value / s.n;
  for (const double value : values) s.sigma += (value - s.mean) * (value - s.mean) / (s.n - 1.0);
  s.sigma = std::sqrt(s.sigma);
  return s;
}

/// Four sigma of an estimated standard deviation of normal values, relative.
double sigma_tolerance(double n) { return 4.0 / std::sqrt(2.0 * n); }

ScenarioSpec resting(std::uint64_t seed, double duration_s) {
  ScenarioSpec spec = spec_of(Scenario::triangle, seed);
  spec.rest_s = duration_s;
  spec.duration_s = duration_s;
  spec.faults = Faults::none();
  return spec;
}

std::vector<RangeReading> ranges_of(const ScenarioSpec& spec) {
  std::vector<RangeReading> ranges;
  Sensors sensors(spec);
  while (const auto reading = sensors.next()) {
    if (const auto* range = std::get_if<RangeReading>(&reading->body)) ranges.push_back(*range);
  }
  return ranges;
}

}  // namespace

TEST_CASE("inertial noise has its density, biases their spread") {
  const std::uint64_t seed = GENERATE(21U, 22U);
  INFO("seed " << seed);
  const Faults usual;
  ScenarioSpec spec = resting(seed, 100.0);
  spec.faults.gyro_noise_radps_rthz = usual.gyro_noise_radps_rthz;
  spec.faults.accel_noise_mps2_rthz = usual.accel_noise_mps2_rthz;
  spec.range_rate_hz = 0.0;
  std::vector<double> rates;
  std::vector<double> forces;
  Sensors sensors(spec);
  while (const auto reading = sensors.next()) {
    const auto& inertial = std::get<InertialReading>(reading->body);
    for (const double rate_radps : inertial.angular_rate_radps) rates.push_back(rate_radps);
    forces.push_back(inertial.specific_force_mps2.x());
  }
  REQUIRE(forces.size() == 10'000);
  // 0.007 deg/s/sqrt(Hz) at 100 Hz is 0.07 deg/s a sample; 200 ug/sqrt(Hz) is 2 mg.
  CHECK(statistics_of(rates).sigma == Approx(radians(0.07)).epsilon(sigma_tolerance(30'000)));
  CHECK(statistics_of(forces).sigma == Approx(2e-3 * 9.80665).epsilon(sigma_tolerance(10'000)));
}

TEST_CASE("turn-on biases and their walk") {
  std::vector<double> gyro;
  std::vector<double> accel;
  std::vector<double> walked;
  for (std::uint64_t seed = 1; seed <= 200; ++seed) {
    ScenarioSpec spec = resting(seed, 4.0);
    spec.inertial_rate_hz = 25.0;
    spec.faults.gyro_bias_sigma_radps = radians(0.5);
    spec.faults.accel_bias_sigma_mps2 = 0.05;
    spec.faults.gyro_walk_radps_rts = 1e-3;
    spec.range_rate_hz = 0.0;
    Sensors sensors(spec);
    std::optional<InertialReading> first;
    InertialReading last;
    while (const auto reading = sensors.next()) {
      last = std::get<InertialReading>(reading->body);
      if (!first) first = last;
    }
    gyro.push_back(first->angular_rate_radps.x());
    accel.push_back(first->specific_force_mps2.y());
    walked.push_back(last.angular_rate_radps.z() - first->angular_rate_radps.z());
  }
  CHECK(statistics_of(gyro).sigma == Approx(radians(0.5)).epsilon(sigma_tolerance(200)));
  CHECK(statistics_of(accel).sigma == Approx(0.05).epsilon(sigma_tolerance(200)));
  // 99 steps of 0.04 s.
  CHECK(statistics_of(walked).sigma == Approx(1e-3 * std::sqrt(99 * 0.04)).epsilon(sigma_tolerance(200)));
}

TEST_CASE("vibration only while moving") {
  ScenarioSpec spec = spec_of(Scenario::triangle, 5);
  spec.faults = Faults::none();
  spec.faults.vibration_mps2 = 0.3;
  spec.range_rate_hz = 0.0;
  Sensors sensors(spec);
  std::vector<double> still;
  std::vector<double> moving;
  while (const auto reading = sensors.next()) {
    const double up_mps2 = std::get<InertialReading>(reading->body).specific_force_mps2.z() - spec.site.gravity_mps2;
    const double t_s = seconds(reading->time_ns - spec.start_ns);
    if (t_s < 3.0) still.push_back(up_mps2);
    if (t_s > 6.0) moving.push_back(up_mps2);
  }
  CHECK(statistics_of(still).sigma < 1e-9);
  CHECK(statistics_of(moving).sigma == Approx(0.3).epsilon(sigma_tolerance(static_cast<double>(moving.size()))));
}

TEST_CASE("the magnetic heading is off by a white and a slow part", "[statistics]") {
  std::vector<double> errors_rad;
  std::vector<double> steps_rad;
  for (std::uint64_t seed = 1; seed <= 60; ++seed) {
    ScenarioSpec spec = resting(seed, 120.0);
    spec.faults.heading_white_rad = radians(1.5);
    spec.faults.heading_slow_rad = radians(2.5);
    spec.range_rate_hz = 0.0;
    spec.placement.heading_rad = spec.site.magnetic_north_heading_rad;
    Sensors sensors(spec);
    std::optional<double> last_rad;
    while (const auto reading = sensors.next()) {
      const auto& field_ut = std::get<InertialReading>(reading->body).magnetic_field_ut;
      if (!field_ut) continue;
      const double error_rad = std::atan2(field_ut->y(), field_ut->x());
      errors_rad.push_back(error_rad);
      if (last_rad) steps_rad.push_back(error_rad - *last_rad);
      last_rad = error_rad;
    }
  }
  // From one sample to the next the slow part hardly moves: 2.5 deg sqrt(2 (1 - exp(-0.05 / 30))) = 0.144 deg.
  const double step_rad = std::sqrt(2.0 * std::pow(radians(1.5), 2) + std::pow(radians(0.1443), 2));
  CHECK(statistics_of(steps_rad).sigma == Approx(step_rad).epsilon(0.02));
  // Of the slow part a run of 120 s holds about 2 x 120 / (2 x 30) independent values; 60 runs 240.
  CHECK(statistics_of(errors_rad).sigma ==
        Approx(std::hypot(radians(1.5), radians(2.5))).epsilon(sigma_tolerance(240)));
}

TEST_CASE("ranges: noise, bias, loss and obstruction") {
  const std::uint64_t seed = GENERATE(31U, 32U, 33U);
  INFO("seed " << seed);
  const Faults usual;
  ScenarioSpec spec = resting(seed, 4000.0);
  spec.inertial_rate_hz = 1.0;
  SECTION("noise and bias") {
    spec.faults.range_sigma_m = 0.10;
    spec.faults.range_bias_max_m = 0.3;
    std::vector<double> errors_m;
    for (const RangeReading& range : ranges_of(spec)) errors_m.push_back(range.range_m - range.true_range_m);
    const Statistics s = statistics_of(errors_m);
    const double bias_m = Sensors(spec).range_bias_m().at(0);
    CHECK(s.n == 80'000);
    CHECK(bias_m >= 0.0);
    CHECK(bias_m <= 0.3);
    CHECK(s.mean == Approx(bias_m).margin(4.0 * 0.10 / std::sqrt(s.n)));
    CHECK(s.sigma == Approx(0.10).epsilon(sigma_tolerance(s.n)));
  }
  SECTION("loss") {
    spec.faults.range_loss = 0.10;
    double lost = 0.0;
    const auto ranges = ranges_of(spec);
    for (const RangeReading& range : ranges) lost += range.lost ? 1.0 : 0.0;
    const auto n = static_cast<double>(ranges.size());
    CHECK(lost / n == Approx(0.10).margin(4.0 * std::sqrt(0.1 * 0.9 / n)));
  }
  SECTION("obstruction in bursts") {
    spec.faults.obstructed_share = usual.obstructed_share;
    std::vector<double> excess_m;
    double bursts = 0.0;
    bool before = false;
    const auto ranges = ranges_of(spec);
    for (const RangeReading& range : ranges) {
      const double error_m = range.range_m - range.true_range_m;
      if (range.obstructed) {
        excess_m.push_back(error_m);
        bursts += before ? 0.0 : 1.0;
      } else {
        REQUIRE(std::abs(error_m) < 1e-12);
      }
      before = range.obstructed;
    }
    const auto n = static_cast<double>(ranges.size());
    const auto obstructed = static_cast<double>(excess_m.size());
    // Neighbours are alike: the share of a two-state chain scatters sqrt(2 x length) times as much.
    CHECK(obstructed / n == Approx(0.05).margin(4.0 * std::sqrt(0.05 * 0.95 / n * 2.0 * 12.0)));
    // Lengths are geometric with mean 12: sigma about 12 each.
    CHECK(obstructed / bursts == Approx(12.0).margin(4.0 * 12.0 / std::sqrt(bursts)));
    // An exponential has its mean as sigma.
    const Statistics s = statistics_of(excess_m);
    CHECK(s.mean == Approx(0.7).margin(4.0 * 0.7 / std::sqrt(obstructed)));
    CHECK(s.sigma == Approx(0.7).epsilon(0.08));
  }
}

TEST_CASE("pressure is that of the standard atmosphere") {
  ScenarioSpec spec = spec_of(Scenario::flight, 1);
  spec.faults = Faults::none();
  spec.rest_s = 1.0;
  spec.duration_s = 0.2;
  // ISO 2533, geopotential height: 1000 m, 89874.6 Pa; 2000 m, 79495.2 Pa.
  const auto [height_m, pressure_pa] =
      GENERATE(table<double, double>({{0.0, 101325.0}, {1000.0, 89874.6}, {2000.0, 79495.2}}));
  spec.site.ground_up_m = height_m - spec.antenna_height_m;
  Sensors sensors(spec);
  std::optional<double> seen_pa;
  while (const auto reading = sensors.next()) {
    if (const auto* inertial = std::get_if<InertialReading>(&reading->body); inertial && inertial->pressure_pa) {
      seen_pa = inertial->pressure_pa;
    }
  }
  REQUIRE(seen_pa);
  CHECK(*seen_pa == Approx(pressure_pa).margin(0.1));
}

TEST_CASE("a fault switched off leaves the draws of the others as they were") {
  ScenarioSpec spec = spec_of(Scenario::rows, 8);
  spec.duration_s = 20.0;
  const auto with = ranges_of(spec);
  spec.faults.obstructed_share = 0.0;
  spec.faults.gyro_noise_radps_rthz = 0.0;
  const auto without = ranges_of(spec);
  REQUIRE(with.size() == without.size());
  for (std::size_t i = 0; i < with.size(); ++i) {
    CHECK(with[i].lost == without[i].lost);
    if (!with[i].obstructed) CHECK(with[i].range_m == without[i].range_m);
  }
}
