#include "simulation/scenario.h"

#include <numbers>

#include "simulation/streams.h"
#include "simulation/vehicle.h"

namespace kedge::simulation {

std::string_view name_of(Scenario scenario) {
  switch (scenario) {
    case Scenario::straight:
      return "straight";
    case Scenario::triangle:
      return "triangle";
    case Scenario::rows:
      return "rows";
    case Scenario::stop_and_go:
      return "stop-and-go";
    case Scenario::flight:
      break;
  }
  return "flight";
}

std::optional<Scenario> scenario_named(std::string_view name) {
  for (const Scenario scenario : scenarios) {
    if (name == name_of(scenario)) return scenario;
  }
  return std::nullopt;
}

double default_duration_s(Scenario scenario) { return scenario == Scenario::rows ? 240.0 : 120.0; }

Placement default_placement(Scenario scenario) {
  constexpr double north = 0.5 * std::numbers::pi;
  switch (scenario) {
    case Scenario::straight:
      return {{-18.0, -20.0}, north, 1.0};
    case Scenario::triangle:
      return {{14.0, 6.0}, 0.0, 1.0};
    case Scenario::rows:
      return {{12.0, -18.0}, north, 1.0};
    case Scenario::stop_and_go:
      return {{-30.0, 10.0}, 0.0, 1.0};
    case Scenario::flight:
      break;
  }
  return {{16.0, -10.0}, 0.25 * std::numbers::pi, 1.0};
}

Placement varied_placement(Scenario scenario, std::uint64_t seed) {
  Random random(seed, streams::placement);
  Placement placement = default_placement(scenario);
  const double angle_rad = random.uniform(-std::numbers::pi, std::numbers::pi);
  placement.start_m.x() += random.uniform(-3.0, 3.0);
  placement.start_m.y() += random.uniform(-3.0, 3.0);
  placement.start_m = Eigen::Rotation2Dd(angle_rad) * placement.start_m;
  placement.heading_rad = wrap_angle(placement.heading_rad + angle_rad);
  return placement;
}

fusion::Profile profile_of(Scenario scenario) {
  return scenario == Scenario::flight ? fusion::Profile::flyer : fusion::Profile::wheeled;
}

fusion::Site ScenarioSpec::default_site() {
  fusion::Site site;
  site.name = "nursery";
  site.anchors.push_back({.name = "mast", .anchor_id = 1, .position_m = {0.0, 0.0, 4.0}});
  site.magnetic_north_heading_rad = 0.5 * std::numbers::pi - radians(3.0);
  site.field_ut = 48.5;
  site.dip_rad = radians(65.0);
  return site;
}

ScenarioSpec spec_of(Scenario scenario, std::uint64_t seed) {
  ScenarioSpec spec;
  spec.scenario = scenario;
  spec.seed = seed;
  spec.duration_s = default_duration_s(scenario);
  spec.placement = default_placement(scenario);
  if (scenario == Scenario::flight) {
    spec.name = "flyer-1";
    spec.device_id = 16;
  }
  return spec;
}

fusion::Tag tag_of(const ScenarioSpec& spec, bool known_start) {
  fusion::Tag tag;
  tag.name = spec.name;
  tag.profile = profile_of(spec.scenario);
  tag.antenna_height_m = spec.antenna_height_m;
  tag.antenna_in_body_m = spec.antenna_in_body_m;
  tag.speed_max_mps = tag.profile == fusion::Profile::flyer ? 15.0 : 3.0;
  tag.magnetometer = spec.magnetometer;
  if (known_start) {
    Random random(spec.seed, streams::start);
    const Truth truth = Vehicle(spec).at(spec.start_ns);
    fusion::Start start;
    start.position_sigma_m = 0.5;
    start.heading_sigma_rad = radians(5.0);
    start.position_m = truth.position_m.head<2>() + random.normal_vector(start.position_sigma_m).head<2>();
    start.heading_rad = wrap_angle(truth.heading_rad() + start.heading_sigma_rad * random.normal());
    tag.start = start;
  }
  return tag;
}

}  // namespace kedge::simulation
