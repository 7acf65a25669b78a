// Is the view to the anchor blocked? A two-state Markov channel: obstructions come in bursts, so that independent
// robust weights for each range do not do it (MATHEMATICS.md, eq. 39). All hypotheses share one channel.
#pragma once

#include <algorithm>
#include <cmath>
#include <numbers>

namespace kedge::fusion {

/// Share of time, mean length, mean of the exponential excess.
inline constexpr double obstructed_share = 0.05;
inline constexpr double obstructed_time_s = 0.6;
inline constexpr double obstructed_excess_m = 0.7;
/// Density of a stray range, 1/m: keeps one range from deciding anything alone.
inline constexpr double stray_density = 1e-4;

/// Probability of being obstructed dt_s after it was `before`.
inline double obstructed_after(double before, double dt_s) {
  const double stay = std::exp(-dt_s / (obstructed_time_s * (1.0 - obstructed_share)));
  return obstructed_share + stay * (before - obstructed_share);
}

inline double normal_density(double value, double sigma) {
  return std::exp(-0.5 * value * value / (sigma * sigma)) / (sigma * std::sqrt(2.0 * std::numbers::pi));
}

/// Density of an exponential excess plus normal noise.
inline double excess_density(double value, double sigma) {
  const double ratio = sigma / obstructed_excess_m;
  const double tail = 0.5 * std::erfc((ratio - value / sigma) / std::numbers::sqrt2);
  return std::exp(std::min(0.5 * ratio * ratio - value / obstructed_excess_m, 50.0)) * tail / obstructed_excess_m;
}

}  // namespace kedge::fusion
