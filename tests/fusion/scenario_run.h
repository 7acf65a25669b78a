// One simulated run through one estimator, scored against the truth.
#pragma once

#include <Eigen/LU>
#include <algorithm>
#include <cmath>
#include <memory>
#include <vector>

#include "core/chi_square.h"
#include "fusion/estimator.h"
#include "simulation/sensors.h"

namespace kedge::fusion {

struct Score {
  double rms_m = 0.0;      ///< second half
  double inside_95 = 0.0;  ///< share of the second half inside the 95 % ellipse
  double nees = 0.0;       ///< mean of two degrees of freedom, second half
  double located = 0.0;    ///< share of the second half with a position
  double wrong = 0.0;      ///< share of the whole run confidently wrong
  double twofold = 0.0;    ///< share of the whole run
};

inline std::vector<Score> sorted_by_rms(std::vector<Score> scores) {
  std::sort(scores.begin(), scores.end(), [](const Score& a, const Score& b) { return a.rms_m < b.rms_m; });
  return scores;
}

/// More than 95 % sure of a mode, with the truth outside its 99.9 % ellipse and more than 2 m away.
inline bool confidently_wrong(const Estimate& estimate, const Vector2& truth_m) {
  if (estimate.phase != Phase::single && estimate.phase != Phase::twofold) return false;
  const Vector2 error = estimate.lead.position_m.head<2>() - truth_m;
  const Matrix2 covariance = estimate.lead.position_covariance_m2.topLeftCorner<2, 2>();
  return estimate.lead.probability > 0.95 && error.norm() > 2.0 &&
         error.dot(covariance.inverse() * error) > chi_square_999[1];
}

inline Score run_scenario(const simulation::ScenarioSpec& spec, const Tag& tag) {
  const std::unique_ptr<Estimator> estimator = make_estimator(spec.site, tag);
  const simulation::Vehicle vehicle(spec);
  Score score;
  double half = 0.0;
  double whole = 0.0;
  TimeNs next_ns = spec.start_ns;
  for (const Measurement& measurement : simulation::measurements_of(spec)) {
    estimator->apply(measurement);
    if (measurement.time_ns < next_ns) continue;
    next_ns += 100 * ns_per_ms;
    const Estimate estimate = estimator->estimate();
    const Vector2 truth = vehicle.at(estimate.time_ns).position_m.head<2>();
    whole += 1.0;
    score.wrong += confidently_wrong(estimate, truth) ? 1.0 : 0.0;
    score.twofold += estimate.phase == Phase::twofold ? 1.0 : 0.0;
    if (seconds(measurement.time_ns - spec.start_ns) < 0.5 * spec.duration_s) continue;
    half += 1.0;
    if (estimate.phase != Phase::single && estimate.phase != Phase::twofold) continue;
    const Vector2 error = estimate.lead.position_m.head<2>() - truth;
    const Matrix2 covariance = estimate.lead.position_covariance_m2.topLeftCorner<2, 2>();
    const double distance = error.dot(covariance.inverse() * error);
    score.located += 1.0;
    score.rms_m += error.squaredNorm();
    score.nees += distance;
    score.inside_95 += distance < chi_square_95[1] ? 1.0 : 0.0;
  }
  score.rms_m = std::sqrt(score.rms_m / std::max(score.located, 1.0));
  score.nees /= std::max(score.located, 1.0);
  score.inside_95 /= std::max(score.located, 1.0);
  score.located /= half;
  score.wrong /= whole;
  score.twofold /= whole;
  return score;
}

/// `runs` varied placements of a scenario, seeds from `first_seed` on; 0 s: of the scenario's own length.
inline std::vector<Score> run_scenarios(simulation::Scenario scenario, int runs, std::uint64_t first_seed,
                                        bool known_start, Method method = Method::speed_aided,
                                        double duration_s = 0.0) {
  std::vector<Score> scores;
  for (int run = 0; run < runs; ++run) {
    const std::uint64_t seed = first_seed + static_cast<std::uint64_t>(run);
    simulation::ScenarioSpec spec = simulation::spec_of(scenario, seed);
    spec.placement = simulation::varied_placement(scenario, seed);
    if (duration_s > 0.0) spec.duration_s = duration_s;
    Tag tag = simulation::tag_of(spec, known_start);
    tag.method = method;
    scores.push_back(run_scenario(spec, tag));
  }
  return sorted_by_rms(scores);
}

inline double median_rms(const std::vector<Score>& sorted) { return sorted[sorted.size() / 2].rms_m; }

}  // namespace kedge::fusion
