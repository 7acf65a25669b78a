#include "pipeline/track.h"

#include <catch2/catch.hpp>
#include <cstdlib>
#include <random>

#include "simulation/sensors.h"
#include "support/count_allocations.h"

using namespace kedge;
using namespace kedge::pipeline;
using kedge::test::allocations;

namespace {

simulation::ScenarioSpec cart(double duration_s) {
  simulation::ScenarioSpec spec = simulation::spec_of(simulation::Scenario::triangle, 5);
  spec.duration_s = duration_s;
  return spec;
}

void ignore(const Entry&, const fusion::Outcome&) {}

}  // namespace

TEST_CASE("late measurements give the same result as measurements in order") {
  const unsigned seed = GENERATE(1U, 2U, 3U, 4U);
  INFO("seed " << seed);
  const auto spec = cart(20.0);
  const auto measurements = simulation::measurements_of(spec);
  const fusion::Tag tag = simulation::tag_of(spec, true);
  const Limits limits;
  Track in_order(spec.site, tag, limits, fusion::make_estimator, ignore);
  Track delayed(spec.site, tag, limits, fusion::make_estimator, ignore);

  struct Due {
    TimeNs arrival_ns;
    std::size_t index;
  };
  std::mt19937 random(seed);
  std::vector<Due> dues;
  for (std::size_t i = 0; i < measurements.size(); ++i) {
    REQUIRE(in_order.file(measurements[i], measurements[i].time_ns, 11) == VerdictCode::used);
    if (i % 10 == 0) in_order.advance();
    // One in five comes late, by anything up to the bound.
    const TimeNs delay_ns = random() % 5 == 0 ? static_cast<TimeNs>(random() % 1000) * ns_per_ms * 99 / 100 : 0;
    dues.push_back({measurements[i].time_ns + delay_ns, i});
  }
  in_order.advance();
  std::stable_sort(dues.begin(), dues.end(), [](const Due& a, const Due& b) { return a.arrival_ns < b.arrival_ns; });
  std::size_t n = 0;
  for (const Due& due : dues) {
    REQUIRE(delayed.file(measurements[due.index], due.arrival_ns, 11) == VerdictCode::used);
    if (++n % 10 == 0) delayed.advance();
  }
  delayed.advance();
  const fusion::Estimate a = *in_order.estimate();
  const fusion::Estimate b = *delayed.estimate();
  CHECK(a.time_ns == b.time_ns);
  CHECK(a.phase == b.phase);
  CHECK(a.lead.position_m == b.lead.position_m);
  CHECK(a.lead.position_covariance_m2 == b.lead.position_covariance_m2);
  CHECK(a.heading_rad == b.heading_rad);
}

TEST_CASE("what is older than the bound, or from the future, is refused") {
  const auto spec = cart(5.0);
  const fusion::Tag tag = simulation::tag_of(spec, true);
  const Limits limits;
  Track track(spec.site, tag, limits, fusion::make_estimator, ignore);
  const fusion::Measurement range = {100 * ns_per_s, fusion::RangeMeasurement{0, 30.0, 0.12}};
  CHECK(track.file(range, 100 * ns_per_s + limits.delay_max_ns + 1, 11) == VerdictCode::too_late);
  CHECK(track.file(range, 99 * ns_per_s, 11) == VerdictCode::from_future);
  CHECK(track.file(range, 100 * ns_per_s + limits.delay_max_ns, 11) == VerdictCode::used);
}

TEST_CASE("a flood between two ticks stays within the bound and loses no verdict") {
  const auto spec = cart(60.0);
  const auto measurements = simulation::measurements_of(spec);
  REQUIRE(measurements.size() > 2 * History::capacity);
  const fusion::Tag tag = simulation::tag_of(spec, true);
  const Limits limits;
  std::size_t told = 0;
  Track track(spec.site, tag, limits, fusion::make_estimator, [&](const Entry&, const fusion::Outcome&) { ++told; });
  for (const auto& measurement : measurements) {
    REQUIRE(track.file(measurement, measurement.time_ns, 11) == VerdictCode::used);
  }
  track.advance();
  CHECK(told == measurements.size());
}

TEST_CASE("from measurement to estimate nothing is allocated once the tag runs") {
  const auto method = GENERATE(fusion::Method::mixture, fusion::Method::speed_aided, fusion::Method::plain);
  const auto spec = cart(30.0);
  const auto measurements = simulation::measurements_of(spec);
  fusion::Tag tag = simulation::tag_of(spec, true);
  tag.method = method;
  const Limits limits;
  Track track(spec.site, tag, limits, fusion::make_estimator, ignore);
  const auto feed = [&](std::size_t from, std::size_t to) {
    double sum = 0.0;
    for (std::size_t i = from; i < to; ++i) {
      // Neighbours change places, so that rewinding is in it.
      const std::size_t index = i ^ 1U;
      const VerdictCode code = track.file(measurements[index], measurements[index].time_ns + 50 * ns_per_ms, 11);
      if (code != VerdictCode::used) std::abort();
      if (i % 12 == 0) {
        track.advance();
        sum += track.estimate()->lead.position_m.x();
      }
    }
    return sum;
  };
  double sum = feed(0, 1000);
  const std::size_t before = allocations;
  sum += feed(1000, measurements.size() / 2 * 2);
  CHECK(allocations - before == 0);
  CHECK(std::isfinite(sum));
}

TEST_CASE("the allocation counter counts") {
  const std::size_t before = allocations;
  auto* probe = new std::vector<int>(100);
  CHECK(allocations - before == 2);
  delete probe;
}
