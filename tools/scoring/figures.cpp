#include "scoring/figures.h"

#include <Eigen/Cholesky>
#include <algorithm>
#include <cmath>

#include "core/assert.h"
#include "core/chi_square.h"

namespace kedge::scoring {

namespace {

constexpr double confident_probability = 0.95;
constexpr double wrong_distance_m = 2.0;

// e' P^-1 e, or nothing where P is not positive definite.
std::optional<double> normalised_square(const Vector2& error_m, const Matrix2& covariance_m2) {
  const Eigen::LLT<Matrix2> factor(covariance_m2);
  if (factor.info() != Eigen::Success || !covariance_m2.allFinite()) return std::nullopt;
  return error_m.dot(factor.solve(error_m));
}

double root_mean_square(const std::vector<double>& values) {
  double sum = 0.0;
  for (const double value : values) sum += value * value;
  return std::sqrt(sum / static_cast<double>(values.size()));
}

double share(std::size_t part, std::size_t whole) {
  return whole == 0 ? 0.0 : static_cast<double>(part) / static_cast<double>(whole);
}

}  // namespace

Window window_after(const std::vector<Sample>& samples, double skip_s) {
  KEDGE_ASSERT(!samples.empty());
  return {samples.front().t_s + skip_s, samples.back().t_s};
}

Window second_half(const std::vector<Sample>& samples) {
  KEDGE_ASSERT(!samples.empty());
  return {0.5 * (samples.front().t_s + samples.back().t_s), samples.back().t_s};
}

bool confidently_wrong(const Sample& sample, const Vector2& truth_m) {
  if (!sample.position_m || sample.probability <= confident_probability) return false;
  const Vector2 error_m = *sample.position_m - truth_m;
  if (error_m.norm() <= wrong_distance_m) return false;
  const auto square = normalised_square(error_m, sample.covariance_m2);
  return !square || *square > chi_square_999[1];
}

Figures figures_of(const std::vector<Sample>& samples, const Track& truth, const Window& window) {
  Figures figures;
  std::vector<double> errors_m;
  std::vector<double> speed_errors_mps;
  double nees_sum = 0.0;
  std::size_t inside = 0;
  std::size_t twofold = 0;
  std::size_t settled = 0;
  for (const Sample& sample : samples) {
    if (sample.t_s < window.begin_s || sample.t_s > window.end_s) continue;
    const auto point = truth.at(sample.t_s);
    if (!point) continue;
    const Vector2 truth_m = point->position_m.head<2>();
    ++figures.samples;
    twofold += sample.standing == feed::v1::Standing::twofold ? 1 : 0;
    settled += sample.standing == feed::v1::Standing::settled ? 1 : 0;
    figures.confidently_wrong_samples += confidently_wrong(sample, truth_m) ? 1 : 0;
    if (sample.speed_mps) speed_errors_mps.push_back(*sample.speed_mps - point->velocity_mps.norm());
    if (!sample.position_m) continue;
    const Vector2 error_m = *sample.position_m - truth_m;
    errors_m.push_back(error_m.norm());
    if (const auto square = normalised_square(error_m, sample.covariance_m2)) {
      nees_sum += *square;
      inside += *square <= chi_square_95[1] ? 1 : 0;
    } else {
      ++figures.covariance_bad;
    }
  }
  figures.positions = errors_m.size();
  figures.available = share(figures.positions, figures.samples);
  figures.confidently_wrong = share(figures.confidently_wrong_samples, figures.samples);
  figures.twofold = share(twofold, figures.samples);
  figures.settled = share(settled, figures.samples);
  if (!speed_errors_mps.empty()) figures.speed_rms_mps = root_mean_square(speed_errors_mps);
  if (!errors_m.empty()) {
    double sum_m = 0.0;
    for (const double error_m : errors_m) sum_m += error_m;
    figures.position_mean_m = sum_m / static_cast<double>(errors_m.size());
    figures.position_rms_m = root_mean_square(errors_m);
    figures.position_p50_m = quantile(errors_m, 0.50);
    figures.position_p95_m = quantile(errors_m, 0.95);
    figures.inside_95 = share(inside, figures.positions);
    const std::size_t good = figures.positions - figures.covariance_bad;
    figures.nees = good == 0 ? 0.0 : nees_sum / static_cast<double>(good);
  }
  if (!samples.empty()) figures.standing = samples.back().standing;
  const auto heard = std::find_if(samples.begin(), samples.end(),
                                  [](const Sample& s) { return s.standing != feed::v1::Standing::silent; });
  const auto first_settled =
      std::find_if(heard, samples.end(), [](const Sample& s) { return s.standing == feed::v1::Standing::settled; });
  if (first_settled != samples.end()) figures.settled_after_s = first_settled->t_s - heard->t_s;
  return figures;
}

Interval wilson_95(double share_seen, double trials) {
  if (trials <= 0.0) return {};
  constexpr double z = 1.959964;  // 97.5 % point of the standard normal
  const double weight = z * z / trials;
  const double centre = (share_seen + 0.5 * weight) / (1.0 + weight);
  const double half = z / (1.0 + weight) * std::sqrt(share_seen * (1.0 - share_seen) / trials + 0.25 * weight / trials);
  return {std::max(0.0, centre - half), std::min(1.0, centre + half)};
}

double quantile(std::vector<double> values, double share_wanted) {
  KEDGE_ASSERT(!values.empty() && share_wanted > 0.0 && share_wanted <= 1.0);
  const auto rank = static_cast<std::size_t>(std::ceil(share_wanted * static_cast<double>(values.size())));
  const auto nth = values.begin() + static_cast<std::ptrdiff_t>(std::max<std::size_t>(rank, 1) - 1);
  std::nth_element(values.begin(), nth, values.end());
  return *nth;
}

}  // namespace kedge::scoring
