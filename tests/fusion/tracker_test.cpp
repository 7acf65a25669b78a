#include "fusion/tracker.h"

#include <catch2/catch.hpp>
#include <cstdlib>
#include <limits>
#include <span>

#include "simulation/sensors.h"
#include "support/count_allocations.h"

using namespace kedge;
using namespace kedge::fusion;
using simulation::Scenario;

namespace {

constexpr double not_a_number = std::numeric_limits<double>::quiet_NaN();

struct Rig {
  explicit Rig(Scenario scenario = Scenario::triangle, std::uint64_t seed = 5, bool known_start = true)
      : spec(simulation::spec_of(scenario, seed)), tag(simulation::tag_of(spec, known_start)) {
    tag.method = Method::speed_aided;
    measurements = simulation::measurements_of(spec);
  }
  simulation::ScenarioSpec spec;
  Tag tag;
  std::vector<Measurement> measurements;
};

std::vector<std::byte> bytes_of(Estimator& estimator) {
  Saver saver;
  estimator.save(saver);
  return saver.bytes();
}

Measurement range_at(TimeNs time_ns, double range_m, double sigma_m = 0.1, std::uint32_t anchor = 0) {
  return {time_ns, RangeMeasurement{anchor, range_m, sigma_m}};
}

Measurement standing_at(TimeNs time_ns, double heading_rad, const Site& site) {
  InertialMeasurement inertial;
  const Quaternion q = level_attitude(heading_rad);
  inertial.specific_force_mps2 = Vector3(0, 0, site.gravity_mps2);
  const Vector3 north = level_attitude(site.magnetic_north_heading_rad) * Vector3::UnitX();
  inertial.magnetic_field_ut = q.conjugate() * Vector3(20.5 * north - 44.0 * Vector3::UnitZ());
  inertial.has_field = true;
  return {time_ns, inertial};
}

}  // namespace

TEST_CASE("saved and loaded, kept and rewound, a tracker goes on to the same bytes") {
  const Rig rig;
  Tracker straight(rig.spec.site, rig.tag);
  Tracker other(rig.spec.site, rig.tag);
  const std::size_t half = rig.measurements.size() / 2;
  for (std::size_t i = 0; i < half; ++i) straight.apply(rig.measurements[i]);
  const std::vector<std::byte> middle = bytes_of(straight);
  straight.keep(3);
  for (std::size_t i = half; i < rig.measurements.size(); ++i) straight.apply(rig.measurements[i]);
  const std::vector<std::byte> end = bytes_of(straight);

  Loader loader(middle);
  other.load(loader);
  REQUIRE(loader.ok());
  CHECK(loader.left() == 0);
  CHECK(bytes_of(other) == middle);
  for (std::size_t i = half; i < rig.measurements.size(); ++i) other.apply(rig.measurements[i]);
  CHECK(bytes_of(other) == end);

  straight.rewind(3);
  CHECK(bytes_of(straight) == middle);
  for (std::size_t i = half; i < rig.measurements.size(); ++i) straight.apply(rig.measurements[i]);
  CHECK(bytes_of(straight) == end);
}

TEST_CASE("a checkpoint cut short is refused") {
  const Rig rig;
  Tracker tracker(rig.spec.site, rig.tag);
  for (std::size_t i = 0; i < 2000; ++i) tracker.apply(rig.measurements[i]);
  const std::vector<std::byte> bytes = bytes_of(tracker);
  for (const std::size_t length : {std::size_t{0}, bytes.size() / 3, bytes.size() - 1}) {
    Tracker other(rig.spec.site, rig.tag);
    Loader loader(std::span<const std::byte>(bytes).first(length));
    other.load(loader);
    CHECK_FALSE(loader.ok());
  }
}

TEST_CASE("applying and estimating allocate nothing") {
  const Rig rig(Scenario::triangle, 6, false);
  Tracker tracker(rig.spec.site, rig.tag);
  const std::size_t before = test::allocations;
  for (const Measurement& measurement : rig.measurements) {
    tracker.apply(measurement);
    tracker.keep(1);
    static_cast<void>(tracker.estimate());
  }
  CHECK(test::allocations == before);
}

TEST_CASE("what is not finite or cannot be is implausible and changes nothing but time") {
  const Rig rig;
  Tracker tracker(rig.spec.site, rig.tag);
  for (std::size_t i = 0; i < 3000; ++i) tracker.apply(rig.measurements[i]);
  const std::vector<std::byte> before = bytes_of(tracker);
  const TimeNs now = rig.measurements[2999].time_ns;
  InertialMeasurement sick;
  sick.specific_force_mps2 = Vector3(not_a_number, 0, 9.8);
  InertialMeasurement huge;
  huge.specific_force_mps2 = Vector3(0, 0, 1e6);
  const MeasurementBody bodies[] = {
      sick,
      huge,
      RangeMeasurement{0, not_a_number, 0.1},
      RangeMeasurement{0, -1.0, 0.1},
      RangeMeasurement{0, 10.0, not_a_number},
      RangeMeasurement{99, 10.0, 0.1},
      PressureMeasurement{not_a_number},
      PressureMeasurement{-5.0},
      TravelMeasurement{0, 1.0, std::nullopt},
      TravelMeasurement{ns_per_s, not_a_number, std::nullopt},
      CorrectionMeasurement{Vector2(not_a_number, 0.0), std::nullopt, 0.5, std::nullopt, 0.1},
      CorrectionMeasurement{Vector2(0.0, 0.0), std::nullopt, 0.0, std::nullopt, 0.1}};
  for (const MeasurementBody& body : bodies) {
    INFO("body " << body.index());
    CHECK(tracker.apply({now, body}).code == Outcome::Code::implausible);
  }
  CHECK(bytes_of(tracker) == before);
  CHECK(tracker.healthy());
}

TEST_CASE("the first measurement may be of any kind, and times may be equal") {
  const Rig rig;
  const MeasurementBody firsts[] = {
      RangeMeasurement{0, 20.0, 0.1}, PressureMeasurement{101325.0}, TravelMeasurement{100 * ns_per_ms, 0.1, 0.0},
      CorrectionMeasurement{rig.tag.start->position_m, std::nullopt, 0.5, rig.tag.start->heading_rad, 0.1},
      InertialMeasurement{}};
  for (const MeasurementBody& first : firsts) {
    Tracker tracker(rig.spec.site, rig.tag);
    tracker.apply({rig.spec.start_ns, first});
    CHECK(tracker.estimate().phase == Phase::waking);
    for (std::size_t i = 0; i < 2000; ++i) {
      tracker.apply(rig.measurements[i]);
      tracker.apply(rig.measurements[i]);
    }
    CHECK(tracker.healthy());
    CHECK(tracker.estimate().phase == Phase::single);
  }
}

TEST_CASE("gaps of every length leave a healthy tracker that says how little it knows") {
  const Rig rig;
  for (const double gap_s : {0.2, 0.6, 3.0, 9.0, 60.0, 1e6}) {
    Tracker tracker(rig.spec.site, rig.tag);
    for (std::size_t i = 0; i < 4000; ++i) tracker.apply(rig.measurements[i]);
    const double before = tracker.estimate().lead.position_covariance_m2.topLeftCorner<2, 2>().trace();
    const TimeNs gap_ns = from_seconds(gap_s);
    Measurement late = rig.measurements[4000];
    late.time_ns += gap_ns;
    tracker.apply(late);
    INFO("gap " << gap_s << " s");
    CHECK(tracker.healthy());
    const Estimate estimate = tracker.estimate();
    if (gap_s > 10.0) {
      CHECK(estimate.phase == Phase::waking);
    } else if (gap_s > 0.5) {
      CHECK(estimate.lead.position_covariance_m2.topLeftCorner<2, 2>().trace() > before);
    }
    for (std::size_t i = 4001; i < 7000; ++i) {
      Measurement next = rig.measurements[i];
      next.time_ns += gap_ns;
      tracker.apply(next);
    }
    CHECK(tracker.healthy());
  }
}

TEST_CASE("ranges that stay too long for seconds are refused, then the tag is sought again") {
  const Rig rig(Scenario::rows, 8);
  Tracker tracker(rig.spec.site, rig.tag);
  int gated = 0;
  bool sought = false;
  const TimeNs from = rig.spec.start_ns + 40 * ns_per_s;
  for (const Measurement& measurement : rig.measurements) {
    Measurement changed = measurement;
    auto* range = std::get_if<RangeMeasurement>(&changed.body);
    // Three metres too long for fifteen seconds.
    const bool blocked = measurement.time_ns > from && measurement.time_ns < from + 15 * ns_per_s;
    if (range != nullptr && blocked) range->range_m += 3.0;
    const Outcome outcome = tracker.apply(changed);
    if (range != nullptr && blocked && outcome.code == Outcome::Code::gated) {
      ++gated;
      CHECK(outcome.innovation > outcome.gate * outcome.sigma);
    }
    const Phase phase = tracker.estimate().phase;
    if (measurement.time_ns > from && (phase == Phase::ring || phase == Phase::twofold)) sought = true;
  }
  CHECK(gated > 20);
  CHECK(sought);
  const Vector3 truth = simulation::Vehicle(rig.spec).at(tracker.estimate().time_ns).position_m;
  CHECK(tracker.estimate().phase == Phase::single);
  CHECK((tracker.estimate().lead.position_m - truth).head<2>().norm() < 6.0);
}

TEST_CASE("without a known start the phases are waking, then ring with its radius") {
  const Rig rig(Scenario::triangle, 12, false);
  Tracker tracker(rig.spec.site, rig.tag);
  CHECK(tracker.estimate().phase == Phase::waking);
  const TimeNs until = rig.spec.start_ns + from_seconds(rig.spec.rest_s - 0.2);
  for (const Measurement& measurement : rig.measurements) {
    if (measurement.time_ns < until) tracker.apply(measurement);
  }
  const Estimate estimate = tracker.estimate();
  CHECK(estimate.phase == Phase::ring);
  REQUIRE(estimate.ring_radius_m);
  const Vector2 start = simulation::Vehicle(rig.spec).at(until).position_m.head<2>();
  CHECK(*estimate.ring_radius_m == Approx(start.norm()).margin(0.6));
  REQUIRE(estimate.heading_rad);
}

TEST_CASE("an operator's word places the tag, points it and decides between mirror images") {
  const Rig rig(Scenario::straight, 9, false);
  Tracker tracker(rig.spec.site, rig.tag);
  std::size_t i = 0;
  while (i < rig.measurements.size() && tracker.estimate().phase != Phase::twofold)
    tracker.apply(rig.measurements[i++]);
  REQUIRE(tracker.estimate().phase == Phase::twofold);
  const TimeNs now = rig.measurements[i].time_ns;
  const Vector2 truth = simulation::Vehicle(rig.spec).at(now).position_m.head<2>();
  CorrectionMeasurement word;
  word.position_m = truth;
  word.position_sigma_m = 0.5;
  CHECK(tracker.apply({now, word}).code == Outcome::Code::used);
  const Estimate placed = tracker.estimate();
  CHECK(placed.phase == Phase::single);
  CHECK((placed.lead.position_m.head<2>() - truth).norm() < 1e-9);
  CHECK(placed.lead.position_covariance_m2(0, 0) == Approx(0.25));

  CorrectionMeasurement pointed;
  pointed.heading_rad = 1.0;
  pointed.heading_sigma_rad = radians(3);
  CHECK(tracker.apply({now, pointed}).code == Outcome::Code::used);
  CHECK(*tracker.estimate().heading_rad == Approx(1.0));
  CHECK(tracker.estimate().heading_sigma_rad == Approx(radians(3)));
}

TEST_CASE("wheels tell the speed") {
  const Rig rig(Scenario::triangle, 14);
  Tracker with(rig.spec.site, rig.tag);
  const simulation::Vehicle vehicle(rig.spec);
  TimeNs next = rig.spec.start_ns + ns_per_s;
  int used = 0;
  double square = 0.0;
  int count = 0;
  for (const Measurement& measurement : rig.measurements) {
    with.apply(measurement);
    if (measurement.time_ns < next) continue;
    next += 200 * ns_per_ms;
    const double speed = vehicle.at(measurement.time_ns).velocity_mps.head<2>().norm();
    const TravelMeasurement travel{200 * ns_per_ms, 0.2 * speed, std::nullopt};
    used += with.apply({measurement.time_ns, travel}).code == Outcome::Code::used ? 1 : 0;
    const double error = with.estimate().lead.velocity_mps.head<2>().norm() - speed;
    square += error * error;
    ++count;
  }
  CHECK(used > 0.9 * count);
  CHECK(std::sqrt(square / count) < 0.08);
}

TEST_CASE("the reported position is the antenna's, the lever arm included") {
  Rig rig(Scenario::triangle, 15);
  rig.tag.antenna_in_body_m = Vector3(0.8, 0.0, 0.3);
  rig.tag.start->position_sigma_m = 0.1;
  const double heading = radians(40);
  rig.tag.start->heading_rad = heading;
  rig.tag.start->heading_sigma_rad = radians(1);
  Tracker tracker(rig.spec.site, rig.tag);
  for (int k = 0; k < 300; ++k) {
    const TimeNs now = rig.spec.start_ns + k * 10 * ns_per_ms;
    tracker.apply(standing_at(now, heading, rig.spec.site));
  }
  const Estimate estimate = tracker.estimate();
  REQUIRE(estimate.phase == Phase::single);
  CHECK(estimate.at_rest);
  CHECK((estimate.lead.position_m.head<2>() - rig.tag.start->position_m).norm() < 0.02);
  CHECK(estimate.lead.position_m.z() == Approx(rig.tag.antenna_height_m + rig.spec.site.ground_up_m).margin(0.01));
}

TEST_CASE("standing still for ten minutes with ranges and a field neither moves nor spreads the tag") {
  Rig rig(Scenario::triangle, 16);
  rig.tag.start->heading_rad = 0.5;
  const Vector2 start = rig.tag.start->position_m;
  const double range = (Vector3(start.x(), start.y(), 0.5) - rig.spec.site.anchors[0].position_m).norm();
  Tracker tracker(rig.spec.site, rig.tag);
  double early = 0.0;
  Vector2 place = Vector2::Zero();
  for (int k = 0; k < 30'000; ++k) {
    const TimeNs now = rig.spec.start_ns + k * 20 * ns_per_ms;
    tracker.apply(standing_at(now, 0.5, rig.spec.site));
    if (k % 3 == 0) tracker.apply(range_at(now, range + 0.05 * std::sin(0.7 * k)));
    if (k == 1000) {
      early = tracker.estimate().lead.position_covariance_m2.topLeftCorner<2, 2>().trace();
      place = tracker.estimate().lead.position_m.head<2>();
    }
  }
  CHECK(tracker.estimate().at_rest);
  CHECK((tracker.estimate().lead.position_m.head<2>() - place).norm() < 0.05);
  CHECK(tracker.estimate().lead.position_covariance_m2.topLeftCorner<2, 2>().trace() <= 1.01 * early);
}

TEST_CASE("a flyer's height follows pressure relative to the start") {
  Rig rig(Scenario::flight, 17);
  Tracker tracker(rig.spec.site, rig.tag);
  const simulation::Vehicle vehicle(rig.spec);
  double square = 0.0;
  int count = 0;
  for (const Measurement& measurement : rig.measurements) {
    if (seconds(measurement.time_ns - rig.spec.start_ns) > 25.0) break;
    tracker.apply(measurement);
    const Estimate estimate = tracker.estimate();
    if (estimate.phase != Phase::single) continue;
    square += std::pow(estimate.lead.position_m.z() - vehicle.at(measurement.time_ns).position_m.z(), 2);
    ++count;
  }
  REQUIRE(count > 100);
  CHECK(std::sqrt(square / count) < 1.0);
}

TEST_CASE("reset forgets a configured start once the tag has run") {
  const Rig rig;
  Tracker tracker(rig.spec.site, rig.tag);
  for (std::size_t i = 0; i < 250; ++i) tracker.apply(rig.measurements[i]);
  CHECK(tracker.estimate().phase == Phase::single);
  tracker.reset(false);
  CHECK(tracker.estimate().phase == Phase::waking);
  for (std::size_t i = 0; i < 250; ++i) tracker.apply(rig.measurements[i]);
  CHECK(tracker.estimate().phase == Phase::ring);
  tracker.reset(true);
  for (std::size_t i = 0; i < 250; ++i) tracker.apply(rig.measurements[i]);
  CHECK(tracker.estimate().phase == Phase::single);
}
