// Figures against hand calculation and against distributions with known answers.
#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "core/chi_square.h"
#include "scoring/figures.h"

using namespace kedge;
using namespace kedge::scoring;
using Word = feed::v1::Standing;

namespace {

/// Along x at 2 m/s from the origin, 0 to 100 s.
Track straight_truth() {
  Track track;
  for (int i = 0; i <= 100; ++i) track.add(i, {2.0 * i, 0.0, 0.5}, Vector2(2.0, 0.0), true);
  return track;
}

Sample sample_at(double t_s, const Vector2& error_m, double sigma_m = 1.0) {
  Sample sample;
  sample.t_s = t_s;
  sample.standing = Word::settled;
  sample.position_m = Vector2(2.0 * t_s, 0.0) + error_m;
  sample.covariance_m2 = sigma_m * sigma_m * Matrix2::Identity();
  return sample;
}

}  // namespace

TEST_CASE("figures by hand") {
  // Errors 1, 2, 3, 4 m: mean 2.5, RMS sqrt(30 / 4), the half does not exceed 2, all but none 4.
  std::vector<Sample> samples = {sample_at(10.0, {1, 0}), sample_at(10.5, {0, -2}), sample_at(11.0, {-3, 0}),
                                 sample_at(11.5, {0, 4})};
  samples[0].speed_mps = 2.5;
  samples[1].speed_mps = 2.0;
  samples[2].speed_mps = 1.0;
  const Figures f = figures_of(samples, straight_truth(), window_after(samples, 0.0));
  CHECK(f.samples == 4);
  CHECK(f.positions == 4);
  CHECK(f.available == 1.0);
  CHECK(f.position_mean_m == Approx(2.5));
  CHECK(f.position_rms_m == Approx(std::sqrt(7.5)));
  CHECK(f.position_p50_m == Approx(2.0));
  CHECK(f.position_p95_m == Approx(4.0));
  CHECK(f.speed_rms_mps.value() == Approx(std::sqrt((0.25 + 0.0 + 1.0) / 3.0)));
  // Squared errors over unit variance: 1, 4, 9, 16. Inside the 95 % ellipse (5.991): two.
  CHECK(f.nees == Approx(7.5));
  CHECK(f.inside_95 == Approx(0.5));
  // Beyond 2 m and 13.816: only 4 m.
  CHECK(f.confidently_wrong == Approx(0.25));
  CHECK(f.settled == 1.0);
  CHECK(f.twofold == 0.0);
  CHECK(f.settled_after_s == 0.0);
}

TEST_CASE("correlated errors are judged by their ellipse") {
  // Variances 4 and 1, correlation 0.5: inverse is 1/3 [1, -1; -1, 4]; for e = (2, 1): (4 - 4 + 4) / 3.
  Sample sample = sample_at(20.0, {2, 1});
  sample.covariance_m2 << 4, 1, 1, 1;
  const Figures f = figures_of({sample}, straight_truth(), {0.0, 100.0});
  CHECK(f.nees == Approx(4.0 / 3.0));
}

TEST_CASE("windows and missing truth") {
  std::vector<Sample> samples;
  for (int i = 0; i <= 10; ++i) samples.push_back(sample_at(95.0 + i, {i < 5 ? 10.0 : 1.0, 0}));
  const Track truth = straight_truth();
  // The truth ends at 100 s.
  CHECK(figures_of(samples, truth, window_after(samples, 0.0)).samples == 6);
  const Figures half = figures_of(samples, truth, second_half(samples));
  CHECK(half.samples == 1);
  CHECK(half.position_rms_m == Approx(1.0));
  CHECK(figures_of(samples, truth, window_after(samples, 4.0)).samples == 2);
  CHECK(figures_of(samples, truth, window_after(samples, 50.0)).samples == 0);
}

TEST_CASE("time to settled counts from the first word of the tag, not from silence") {
  std::vector<Sample> samples(6);
  const Standing standings[] = {Word::silent,  Word::waking,  Word::twofold,
                                Word::twofold, Word::settled, Word::coasting};
  for (std::size_t i = 0; i < samples.size(); ++i) {
    samples[i].t_s = 10.0 + static_cast<double>(i);
    samples[i].standing = standings[i];
    if (i >= 2) samples[i].position_m = Vector2(2.0 * samples[i].t_s, 0.0);
  }
  const Figures f = figures_of(samples, straight_truth(), window_after(samples, 0.0));
  CHECK(f.settled_after_s == 3.0);
  CHECK(f.available == Approx(4.0 / 6.0));
  CHECK(f.twofold == Approx(2.0 / 6.0));
  CHECK(f.standing == Word::coasting);
  // Those four had no covariance: outside, and in no NEES.
  CHECK(f.covariance_bad == 4);
  CHECK(f.inside_95 == 0.0);
  samples.resize(4);
  CHECK_FALSE(figures_of(samples, straight_truth(), window_after(samples, 0.0)).settled_after_s);
}

TEST_CASE("confidently wrong needs confidence, distance and a small ellipse") {
  const Vector2 truth_m(20.0, 0.0);
  Sample sample = sample_at(10.0, {2.1, 0}, 0.5);  // 17.6 > 13.816
  CHECK(confidently_wrong(sample, truth_m));
  sample.probability = 0.95;
  CHECK_FALSE(confidently_wrong(sample, truth_m));
  sample.probability = 0.96;
  CHECK(confidently_wrong(sample, truth_m));
  CHECK_FALSE(confidently_wrong(sample_at(10.0, {1.9, 0}, 0.1), truth_m));  // near
  CHECK_FALSE(confidently_wrong(sample_at(10.0, {3.7, 0}, 1.0), truth_m));  // 13.69 < 13.816
  CHECK(confidently_wrong(sample_at(10.0, {3.72, 0}, 1.0), truth_m));       // 13.84 > 13.816
  sample.position_m.reset();
  CHECK_FALSE(confidently_wrong(sample, truth_m));
}

TEST_CASE("an honest circular Gaussian") {
  // NIST/SEMATECH e-Handbook (Rayleigh distribution): half of the errors lie within 1.1774 sigma, 95 %
  // within 2.4477 sigma; the mean is 1.2533 sigma (sqrt(pi / 2)), the root mean square sqrt(2) sigma.
  const std::uint64_t seed = 12345;
  INFO("seed " << seed);
  std::mt19937_64 engine(seed);
  std::normal_distribution<double> normal(0.0, 0.7);
  std::vector<Sample> samples;
  constexpr int n = 40'000;
  for (int i = 0; i < n; ++i) {
    const double x_m = normal(engine);
    samples.push_back(sample_at(100.0 * i / n, {x_m, normal(engine)}, 0.7));
  }
  const Figures f = figures_of(samples, straight_truth(), window_after(samples, 0.0));
  const double root_n = std::sqrt(static_cast<double>(n));
  CHECK(f.position_p50_m == Approx(1.1774 * 0.7).epsilon(0.02));
  CHECK(f.position_p95_m == Approx(circular_95 * 0.7).epsilon(0.02));
  CHECK(f.position_mean_m == Approx(1.2533 * 0.7).epsilon(0.02));
  CHECK(f.position_rms_m == Approx(std::sqrt(2.0) * 0.7).epsilon(0.02));
  CHECK(f.inside_95 == Approx(0.95).margin(4.0 * std::sqrt(0.95 * 0.05) / root_n));
  CHECK(f.nees == Approx(2.0).margin(4.0 * 2.0 / root_n));  // chi-square with 2 degrees: variance 4
  CHECK(f.confidently_wrong < 0.002);
}

TEST_CASE("quantiles are nearest ranks") {
  CHECK(quantile({5.0}, 0.5) == 5.0);
  CHECK(quantile({4, 1, 3, 2}, 0.5) == 2.0);
  CHECK(quantile({4, 1, 3, 2}, 0.51) == 3.0);
  CHECK(quantile({4, 1, 3, 2}, 1.0) == 4.0);
  std::vector<double> hundred;
  for (int i = 100; i >= 1; --i) hundred.push_back(i);
  CHECK(quantile(hundred, 0.95) == 95.0);
}

TEST_CASE("Wilson's interval") {
  // Newcombe, Two-sided confidence intervals for the single proportion, Statistics in Medicine 17, 1998,
  // table I, method 3: 81 of 263, 15 of 148, 0 of 20, 1 of 29 (values from memory).
  const auto check = [](double hits, double trials, double low, double high) {
    const Interval interval = wilson_95(hits / trials, trials);
    CHECK(interval.low == Approx(low).margin(5e-5));
    CHECK(interval.high == Approx(high).margin(5e-5));
  };
  check(81, 263, 0.2553, 0.3662);
  check(15, 148, 0.0624, 0.1605);
  check(0, 20, 0.0, 0.1611);
  check(1, 29, 0.0061, 0.1718);
}
