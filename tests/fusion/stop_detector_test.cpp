#include "fusion/stop_detector.h"

#include <catch2/catch.hpp>
#include <random>

#include "core/physics.h"
#include "fusion/motion_history.h"

using namespace kedge;
using namespace kedge::fusion;

namespace {

/// One second at 100 Hz; true when the end is quiet.
bool quiet_after(const Vector3& extra_force, const Vector3& rate, double force_sigma, double rate_sigma) {
  std::mt19937 random(3);
  std::normal_distribution<double> normal;
  const auto noise = [&](double sigma) {
    return Vector3(sigma * Vector3(normal(random), normal(random), normal(random)));
  };
  StopDetector detector;
  for (int k = 0; k < 100; ++k) {
    detector.add(k * 10 * ns_per_ms, Vector3(0, 0, gravity_mps2_default) + extra_force + noise(force_sigma),
                 rate + noise(rate_sigma));
  }
  return detector.quiet(gravity_mps2_default);
}

}  // namespace

TEST_CASE("standing is seen through the biases of a low-cost unit") {
  CHECK(quiet_after({0.05, -0.08, 0.1}, {0.009, -0.009, 0.012}, 0.02, 0.001));
}

TEST_CASE("vibration, turning and strong acceleration are motion") {
  CHECK_FALSE(quiet_after(Vector3::Zero(), Vector3::Zero(), 0.3, 0.001));
  CHECK_FALSE(quiet_after(Vector3::Zero(), {0, 0, 0.1}, 0.02, 0.001));
  CHECK_FALSE(quiet_after({0, 0, 0.6}, Vector3::Zero(), 0.02, 0.001));
}

TEST_CASE("the statistic is 1 on average for the noise assumed at rest") {
  std::mt19937 random(5);
  std::normal_distribution<double> normal;
  double sum = 0.0;
  constexpr int runs = 400;
  for (int run = 0; run < runs; ++run) {
    StopDetector detector;
    for (int k = 0; k < 60; ++k) {
      const Vector3 force(normal(random), normal(random), normal(random));
      const Vector3 rate(normal(random), normal(random), normal(random));
      detector.add(k * 10 * ns_per_ms, Vector3(0, 0, 9.8) + StopDetector::rest_accel_sigma_mps2 * force,
                   StopDetector::rest_gyro_sigma_radps * rate);
    }
    sum += detector.statistic();
  }
  // 400 means of 354 squares: known to 0.4 %, 1 sigma.
  CHECK(sum / runs == Approx(1.0).epsilon(0.02));
}

TEST_CASE("no verdict before the window is full, nor right after a gap") {
  StopDetector detector;
  for (int k = 0; k < 40; ++k) detector.add(k * 10 * ns_per_ms, Vector3(0, 0, 9.806), Vector3::Zero());
  CHECK_FALSE(detector.quiet(9.806));
  for (int k = 40; k < 100; ++k) detector.add(k * 10 * ns_per_ms, Vector3(0, 0, 9.806), Vector3::Zero());
  CHECK(detector.quiet(9.806));
  detector.add(5 * ns_per_s, Vector3(0, 0, 9.806), Vector3::Zero());
  CHECK_FALSE(detector.quiet(9.806));
}

TEST_CASE("motion is straight and steady while heading and gained speed span little") {
  MotionHistory history;
  for (int k = 0; k <= 60; ++k) {
    const double turned = k <= 40 ? 0.0 : radians(1.0) * (k - 40);
    const double gained = k <= 20 ? 0.1 * k : 2.0;
    history.add(from_seconds(0.1 * k), turned, gained);
  }
  CHECK(degrees(history.turn_span_rad(0)) == Approx(20.0));
  CHECK_FALSE(history.straight(from_seconds(3.0)));
  CHECK(history.straight(from_seconds(5.6)));
  CHECK(history.gain_span_mps(0) == Approx(2.0));
  CHECK_FALSE(history.steady(0));
  CHECK(history.steady(from_seconds(2.0)));
}
