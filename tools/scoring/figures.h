// The figures by which estimates are judged: those of ISO/IEC 18305:2016 (mean, root mean square, 50 and
// 95 % horizontal error, availability), and how honest the stated uncertainty is.
//
// While `twofold` the reported (leading) position is the one scored; the share of that time is given.
#pragma once

#include <cstddef>
#include <optional>
#include <string>
#include <vector>

#include "core/rotation.h"
#include "proto/feed.pb.h"
#include "scoring/truth.h"

namespace kedge::scoring {

using Standing = feed::v1::Standing::Value;

/// One estimate of one tag at one instant.
struct Sample {
  double t_s = 0.0;
  Standing standing = feed::v1::Standing::silent;
  std::optional<Vector2> position_m;  ///< site east, north
  Matrix2 covariance_m2 = Matrix2::Zero();
  double probability = 1.0;
  std::optional<double> speed_mps;  ///< over ground
};

/// Time limits of what is scored, both included.
struct Window {
  double begin_s = 0.0;
  double end_s = 0.0;
};

/// From `skip_s` after the first sample to the last. Precondition: samples is not empty.
[[nodiscard]] Window window_after(const std::vector<Sample>& samples, double skip_s);
/// The second half of the time between first and last sample.
[[nodiscard]] Window second_half(const std::vector<Sample>& samples);

struct Figures {
  std::size_t samples = 0;    ///< in the window, with a truth beside them
  std::size_t positions = 0;  ///< of these, with a position
  double available = 0.0;     ///< positions / samples
  double position_mean_m = 0.0;
  double position_rms_m = 0.0;
  double position_p50_m = 0.0;  ///< smallest error that is not exceeded by half of the samples
  double position_p95_m = 0.0;
  std::optional<double> speed_rms_mps;
  double inside_95 = 0.0;          ///< share of positions whose 95 % ellipse holds the truth
  double nees = 0.0;               ///< mean of e' P^-1 e over the two level axes; 2 when honest
  std::size_t covariance_bad = 0;  ///< not positive definite: counted as outside, left out of nees
  double confidently_wrong = 0.0;  ///< share of samples
  std::size_t confidently_wrong_samples = 0;
  double twofold = 0.0;                            ///< share of samples
  double settled = 0.0;                            ///< share of samples
  std::optional<double> settled_after_s;           ///< from the first sample that is not silent, window or not
  Standing standing = feed::v1::Standing::silent;  ///< at the end
};

/// The reported mode has a probability over 0.95, and the truth lies outside its 99.9 % ellipse and more
/// than 2 m away.
[[nodiscard]] bool confidently_wrong(const Sample& sample, const Vector2& truth_m);

/// Figures of the samples (in order of time) inside the window.
[[nodiscard]] Figures figures_of(const std::vector<Sample>& samples, const Track& truth, const Window& window);

/// Wilson's score interval of a share, 95 % (Wilson, J. American Statistical Association 22, 1927).
struct Interval {
  double low = 0.0;
  double high = 1.0;
};
[[nodiscard]] Interval wilson_95(double share, double trials);

/// Nearest-rank quantile: the smallest value that at least `share` of the values do not exceed.
/// Precondition: values is not empty, 0 < share <= 1.
[[nodiscard]] double quantile(std::vector<double> values, double share);

}  // namespace kedge::scoring
