// What is to be simulated: one tag on one course around the anchors, with its faults, from one seed.
//
// Nothing here knows files, sockets or clocks. Two views are made of a specification: measurements in
// body axes and station time for tests of estimators (simulation/sensors.h), and packets as they reach
// the station (simulation/packets.h).
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "core/rotation.h"
#include "core/time.h"
#include "fusion/site.h"
#include "simulation/faults.h"

namespace kedge::simulation {

enum class Scenario : std::uint8_t {
  straight,     ///< long straight lines, 1.5 m/s; the first turn comes after 40 m
  triangle,     ///< sides of 25 m, 2 m/s
  rows,         ///< up and down 40 m rows 4 m apart, 1.5 m/s
  stop_and_go,  ///< a square with halts, 2 m/s
  flight,       ///< climbing figure of eight, 3 m/s, yaw free
};
inline constexpr Scenario scenarios[] = {Scenario::straight, Scenario::triangle, Scenario::rows, Scenario::stop_and_go,
                                         Scenario::flight};

[[nodiscard]] std::string_view name_of(Scenario scenario);  ///< "stop-and-go"
[[nodiscard]] std::optional<Scenario> scenario_named(std::string_view name);
[[nodiscard]] double default_duration_s(Scenario scenario);

/// Where the course begins and which way.
struct Placement {
  Vector2 start_m = Vector2::Zero();  ///< site east, north
  double heading_rad = 0.0;           ///< from site east, counter-clockwise
  double scale = 1.0;                 ///< of the lengths; speeds stay
};

/// One that keeps the course some 10 to 60 m from an anchor at the origin.
[[nodiscard]] Placement default_placement(Scenario scenario);
/// The default turned about the origin by any angle and shifted by some metres, drawn from the seed.
[[nodiscard]] Placement varied_placement(Scenario scenario, std::uint64_t seed);

/// How a ranging is reported.
enum class RangeForm : std::uint8_t { distance, single_sided, double_sided, second_reply };

struct ScenarioSpec {
  Scenario scenario = Scenario::triangle;
  std::uint64_t seed = 1;
  double duration_s = default_duration_s(Scenario::triangle);
  TimeNs start_ns = 1000 * ns_per_s;  ///< station time of the first sample
  double rest_s = 3.0;                ///< standing still before moving off
  Placement placement = default_placement(Scenario::triangle);
  Faults faults;

  fusion::Site site = default_site();
  std::string name = "cart-1";
  std::uint32_t device_id = 11;
  double antenna_height_m = 0.5;                ///< above the ground
  Vector3 antenna_in_body_m = Vector3::Zero();  ///< lever arm, inertial unit to range antenna
  Quaternion q_sensor_to_body = Quaternion::Identity();
  bool magnetometer = true;

  double inertial_rate_hz = 100.0;
  std::uint32_t samples_per_packet = 5;  ///< the field is sampled once a packet
  double range_rate_hz = 20.0;           ///< to each anchor
  RangeForm range_form = RangeForm::distance;
  std::uint32_t counter_bits = 40;  ///< of the ranging counters
  std::uint32_t clock_bits = 64;    ///< of the device clock, 32 or 64
  bool bundled = false;             ///< rangings travel in the datagram of the next inertial batch

  /// One anchor, `mast` (number 1), at the origin, 4 m up; magnetic field 48.5 uT, dip 65 degrees,
  /// declination 3 degrees east.
  [[nodiscard]] static fusion::Site default_site();
};

/// Defaults of that scenario in the default place.
[[nodiscard]] ScenarioSpec spec_of(Scenario scenario, std::uint64_t seed);

[[nodiscard]] fusion::Profile profile_of(Scenario scenario);

/// What an estimator is told of the tag. `known_start`: the true start with errors drawn from the seed,
/// within the sigmas that are stated (0.5 m, 5 degrees).
[[nodiscard]] fusion::Tag tag_of(const ScenarioSpec& spec, bool known_start);
[[nodiscard]] inline const fusion::Site& site_of(const ScenarioSpec& spec) { return spec.site; }

}  // namespace kedge::simulation
