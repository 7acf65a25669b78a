#include "fusion/standard_tracker.h"

#include <catch2/catch.hpp>
#include <limits>
#include <span>

#include "fusion/scenario_run.h"
#include "support/allocations.h"

using namespace kedge;
using namespace kedge::fusion;
using simulation::Scenario;

namespace {

constexpr double not_a_number = std::numeric_limits<double>::quiet_NaN();

struct Rig {
  explicit Rig(Scenario scenario = Scenario::triangle, std::uint64_t seed = 5, bool known_start = false,
               double duration_s = 30.0)
      : spec(simulation::spec_of(scenario, seed)), tag(simulation::tag_of(spec, known_start)) {
    spec.duration_s = duration_s;
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

}  // namespace

TEST_CASE("standard: saved and loaded, kept and rewound, it goes on to the same bytes") {
  const Rig rig;
  StandardTracker straight(rig.spec.site, rig.tag);
  StandardTracker other(rig.spec.site, rig.tag);
  // In the bank, in the turn, and settled.
  for (const std::size_t cut : {rig.measurements.size() / 10, rig.measurements.size() / 2}) {
    straight.reset(true);
    for (std::size_t i = 0; i < cut; ++i) straight.apply(rig.measurements[i]);
    const std::vector<std::byte> middle = bytes_of(straight);
    straight.keep(3);
    for (std::size_t i = cut; i < rig.measurements.size(); ++i) straight.apply(rig.measurements[i]);
    const std::vector<std::byte> end = bytes_of(straight);

    Loader loader(middle);
    other.load(loader);
    REQUIRE(loader.ok());
    CHECK(loader.left() == 0);
    CHECK(bytes_of(other) == middle);
    for (std::size_t i = cut; i < rig.measurements.size(); ++i) other.apply(rig.measurements[i]);
    CHECK(bytes_of(other) == end);

    straight.rewind(3);
    CHECK(bytes_of(straight) == middle);
    for (std::size_t i = cut; i < rig.measurements.size(); ++i) straight.apply(rig.measurements[i]);
    CHECK(bytes_of(straight) == end);
  }
}

TEST_CASE("standard: a checkpoint cut short, or with more components than there can be, is refused") {
  const Rig rig;
  StandardTracker tracker(rig.spec.site, rig.tag);
  for (std::size_t i = 0; i < 1000; ++i) tracker.apply(rig.measurements[i]);
  const std::vector<std::byte> bytes = bytes_of(tracker);
  for (const std::size_t length : {std::size_t{0}, bytes.size() / 3, bytes.size() - 1}) {
    StandardTracker other(rig.spec.site, rig.tag);
    Loader loader(std::span<const std::byte>(bytes).first(length));
    other.load(loader);
    CHECK_FALSE(loader.ok());
  }
  Saver saver;
  std::size_t count = Mixture::capacity + 1;
  saver(count);
  Mixture mixture;
  Loader loader(saver.bytes());
  loader(mixture);
  CHECK_FALSE(loader.ok());
  CHECK(mixture.empty());
}

TEST_CASE("standard: applying, estimating and keeping allocate nothing, bank and all") {
  const Rig rig(Scenario::triangle, 6, false, 60.0);
  StandardTracker tracker(rig.spec.site, rig.tag);
  const std::size_t before = test::allocations;
  for (const Measurement& measurement : rig.measurements) {
    tracker.apply(measurement);
    tracker.keep(1);
    static_cast<void>(tracker.estimate());
  }
  CHECK(test::allocations == before);
}

TEST_CASE("standard: what is not finite or cannot be is implausible and leaves it healthy") {
  const Rig rig;
  StandardTracker tracker(rig.spec.site, rig.tag);
  for (std::size_t i = 0; i < 2000; ++i) tracker.apply(rig.measurements[i]);
  const TimeNs now = rig.measurements[1999].time_ns;
  InertialMeasurement sick;
  sick.specific_force_mps2 = Vector3(not_a_number, 0, 9.8);
  InertialMeasurement huge;
  huge.specific_force_mps2 = Vector3(0, 0, 1e6);
  CorrectionMeasurement nowhere;
  nowhere.position_m = Vector2(not_a_number, 0.0);
  TravelMeasurement backwards;
  backwards.interval_ns = -1;
  const MeasurementBody bodies[] = {sick,
                                    huge,
                                    nowhere,
                                    backwards,
                                    RangeMeasurement{0, not_a_number, 0.1},
                                    RangeMeasurement{0, -1.0, 0.1},
                                    RangeMeasurement{0, 10.0, not_a_number},
                                    RangeMeasurement{9, 10.0, 0.1},
                                    PressureMeasurement{-5.0}};
  for (const MeasurementBody& body : bodies) {
    CHECK(tracker.apply({now, body}).code == Outcome::Code::implausible);
  }
  CHECK(tracker.healthy());
}

TEST_CASE("standard: an operator's word places the tag and points it") {
  Rig rig(Scenario::triangle, 5, false, 12.0);
  StandardTracker tracker(rig.spec.site, rig.tag);
  for (const Measurement& measurement : rig.measurements) tracker.apply(measurement);
  const TimeNs now = rig.measurements.back().time_ns;
  const simulation::Truth truth = simulation::Vehicle(rig.spec).at(now);
  CorrectionMeasurement word;
  word.position_m = truth.position_m.head<2>();
  word.position_sigma_m = 0.3;
  word.heading_rad = truth.heading_rad();
  word.heading_sigma_rad = 0.02;
  CHECK(tracker.apply({now, word}).code == Outcome::Code::used);
  const Estimate estimate = tracker.estimate();
  CHECK(estimate.phase == Phase::single);
  CHECK(estimate.lead.probability == 1.0);
  CHECK((estimate.lead.position_m - truth.position_m).head<2>().norm() < 1e-6);
  CHECK(std::sqrt(estimate.lead.position_covariance_m2(0, 0)) == Approx(0.3).epsilon(0.05));
  CHECK(std::abs(wrap_angle(*estimate.heading_rad - truth.heading_rad())) < 1e-6);
  CHECK(estimate.heading_sigma_rad == Approx(0.02).epsilon(0.01));
}

TEST_CASE("standard: without a magnetometer and without a told heading there is a ring and no position") {
  Rig rig(Scenario::triangle, 5, false);
  rig.spec.magnetometer = false;
  rig.tag.magnetometer = false;
  rig.measurements = simulation::measurements_of(rig.spec);
  StandardTracker tracker(rig.spec.site, rig.tag);
  for (const Measurement& measurement : rig.measurements) tracker.apply(measurement);
  const Estimate estimate = tracker.estimate();
  // A turn of the whole path about the anchor changes nothing that is measured.
  CHECK(estimate.phase == Phase::ring);
  CHECK_FALSE(estimate.heading_rad);
  REQUIRE(estimate.ring_radius_m);
  const Vector2 truth = simulation::Vehicle(rig.spec).at(estimate.time_ns).position_m.head<2>();
  CHECK(std::abs(*estimate.ring_radius_m - truth.norm()) < 1.0);
}

TEST_CASE("standard: switched off and carried, or put down elsewhere between two ranges, it finds itself again") {
  const Rig rig(Scenario::triangle, 11, true, 60.0);
  const double end_heading = simulation::Vehicle(rig.spec).at(rig.measurements.back().time_ns).heading_rad();
  const auto [gap_s, heading_rad] = GENERATE_COPY(std::pair{20.0, 1.0}, std::pair{0.01, end_heading});
  simulation::ScenarioSpec elsewhere = rig.spec;
  elsewhere.start_ns = rig.spec.start_ns + from_seconds(60.0 + gap_s);
  elsewhere.placement = {Vector2(-25.0, -12.0), heading_rad, 1.0};
  elsewhere.duration_s = 120.0;
  StandardTracker tracker(rig.spec.site, rig.tag);
  for (const Measurement& measurement : rig.measurements) tracker.apply(measurement);
  const simulation::Vehicle vehicle(elsewhere);
  double wrong = 0.0;
  double count = 0.0;
  Estimate estimate;
  for (const Measurement& measurement : simulation::measurements_of(elsewhere)) {
    tracker.apply(measurement);
    if (seconds(measurement.time_ns - elsewhere.start_ns) < 60.0) continue;
    estimate = tracker.estimate();
    count += 1.0;
    wrong += confidently_wrong(estimate, vehicle.at(estimate.time_ns).position_m.head<2>()) ? 1.0 : 0.0;
  }
  INFO("gap of " << gap_s << " s");
  CHECK(wrong < 0.05 * count);
  // The other side of the anchor is tens of metres away; heading is good for 2 degrees at 40 m.
  CHECK((estimate.lead.position_m - vehicle.at(estimate.time_ns).position_m).head<2>().norm() < 5.0);
}
