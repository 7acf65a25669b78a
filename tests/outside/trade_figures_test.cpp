// What the trade expects of one anchor and a low-cost inertial unit. Common practice, no source: on a
// triangular course at 2 m/s from a known start the speed-aided method reaches 1 m RMS where a plain filter
// is at about 2.8 m; in simulation the improvement is more than threefold.
#include <catch2/catch.hpp>

#include "fusion/scenario_run.h"

using namespace kedge;
using namespace kedge::fusion;

namespace {
constexpr int runs = 40;
constexpr std::uint64_t first_seed = 2000;  // never used in tuning
}  // namespace

TEST_CASE("speed-aided on a triangle: 1 m RMS, more than three times better than plain", "[statistics]") {
  const auto aided = run_scenarios(simulation::Scenario::triangle, runs, first_seed, true);
  const auto plain = run_scenarios(simulation::Scenario::triangle, runs, first_seed, true, Method::plain);
  CAPTURE(median_rms(aided), median_rms(plain));
  CHECK(median_rms(aided) <= 1.0);
  CHECK(median_rms(plain) > 3.0 * median_rms(aided));
}

TEST_CASE("plain on a triangle: about 2.8 m where the run is short", "[statistics]") {
  // A plain filter's error grows without bound, so its figure means something for one length of run only. The
  // trade does not say which; it is met by runs of some 18 s, and passed threefold within the minute.
  const auto brief = run_scenarios(simulation::Scenario::triangle, runs, first_seed, true, Method::plain, 18.0);
  const auto minute = run_scenarios(simulation::Scenario::triangle, runs, first_seed, true, Method::plain, 60.0);
  CAPTURE(median_rms(brief), median_rms(minute));
  CHECK(median_rms(brief) > 2.8 / 1.5);
  CHECK(median_rms(brief) < 2.8 * 1.5);
  CHECK(median_rms(minute) > 3.0 * 2.8);
}
