#include "fusion/speed_check.h"

#include <algorithm>
#include <array>
#include <cmath>

namespace kedge::fusion {

namespace {

constexpr TimeNs spacing_ns = 45 * ns_per_ms;
constexpr TimeNs solve_ns = 500 * ns_per_ms;
constexpr TimeNs window_long_ns = 6 * ns_per_s;
constexpr TimeNs window_short_ns = 3 * ns_per_s;
constexpr TimeNs rate_window_ns = 1'500 * ns_per_ms;
constexpr double level_range_min_m = 0.5;
constexpr double chi_square_max = 2.5;
constexpr double sigma_max_mps = 0.5;

}  // namespace

void SpeedCheck::add(TimeNs time_ns, const RangeMeasurement& range, double straight_m, double height_m) {
  if (range.anchor != anchor_) {
    const bool unheard = window_.empty() || time_ns - window_.back().time_ns > 2 * ns_per_s;
    if (!unheard) return;
    window_.clear();
    ring_radius_m_.reset();
    anchor_ = range.anchor;
  }
  if (!window_.empty() && time_ns - window_.back().time_ns < spacing_ns) return;
  const double level_square = straight_m * straight_m - height_m * height_m;
  if (!(level_square > level_range_min_m * level_range_min_m)) return;
  RangePoint point;
  point.time_ns = time_ns;
  point.range_m = std::sqrt(level_square);
  point.sigma_m = range.sigma_m * straight_m / point.range_m;
  point.path_s = path_s_;
  window_.push_back(point);
  const double smooth = ring_radius_m_ ? 0.2 : 1.0;
  const double before = ring_radius_m_.value_or(0.0);
  ring_radius_m_ = before + smooth * (point.range_m - before);
}

std::optional<WindowSpeed> SpeedCheck::solved(std::size_t first, bool straight) const {
  WindowSpeed speed;
  speed.time_ns = window_.back().time_ns;
  if (straight) {
    const auto fit = least_squares_speed(window_, first);
    if (!fit || fit->chi_square > chi_square_max) return std::nullopt;
    speed.speed_mps = fit->speed_mps;
    speed.sigma_mps = fit->speed_sigma_mps * std::sqrt(std::max(fit->chi_square, 1.0));
    return speed;
  }
  const auto fit = shaped_speed(window_, first);
  if (!fit || fit->best.chi_square > chi_square_max) return std::nullopt;
  speed.speed_mps = fit->best.speed_mps;
  speed.sigma_mps = std::sqrt(fit->best.covariance(2, 2) * std::max(fit->best.chi_square, 1.0));
  return speed;
}

void SpeedCheck::solve(TimeNs time_ns, const MotionHistory& motion, double range_bias_sigma_m, double speed_max_mps,
                       bool course_known) {
  if (time_ns - tried_ns_ < solve_ns || window_.empty()) return;
  tried_ns_ = time_ns;
  const std::size_t first = first_since(window_, time_ns - window_long_ns);
  if (first >= window_.size()) return;
  const TimeNs begin_ns = window_[first].time_ns;
  if (window_.back().time_ns - begin_ns < window_short_ns || !motion.steady(begin_ns)) return;
  std::optional<WindowSpeed> speed = solved(first, motion.straight(begin_ns) && course_known);
  if (!speed) return;
  // A constant range error left bends the circle: its share of the distance is one of the speed.
  speed->sigma_mps = std::hypot(speed->sigma_mps, speed->speed_mps * range_bias_sigma_m / window_.back().range_m);
  if (speed->speed_mps > 2.0 * speed_max_mps || !(speed->sigma_mps < sigma_max_mps)) return;
  speed_ = speed;
}

std::optional<RangeRate> SpeedCheck::rate(TimeNs time_ns) const {
  std::size_t first = first_since(window_, time_ns - rate_window_ns);
  if (window_.size() < first + 10) first = first_since(window_, time_ns - 4 * rate_window_ns);
  return range_rate(window_, first);
}

bool SpeedCheck::heard(TimeNs time_ns) const {
  return !window_.empty() && time_ns - window_.back().time_ns < rate_window_ns;
}

std::optional<double> SpeedCheck::level_range_m(TimeNs time_ns) const {
  std::array<double, 32> ranges_m{};
  std::size_t count = 0;
  for (std::size_t i = first_since(window_, time_ns - ns_per_s); i < window_.size() && count < ranges_m.size(); ++i) {
    ranges_m[count++] = window_[i].range_m;
  }
  if (count == 0) return std::nullopt;
  const auto middle = ranges_m.begin() + static_cast<std::ptrdiff_t>(count / 2);
  std::nth_element(ranges_m.begin(), middle, ranges_m.begin() + static_cast<std::ptrdiff_t>(count));
  return *middle;
}

std::optional<WindowSpeed> SpeedCheck::speed(TimeNs time_ns) const {
  if (!speed_ || time_ns - speed_->time_ns >= 2 * ns_per_s) return std::nullopt;
  return speed_;
}

}  // namespace kedge::fusion
