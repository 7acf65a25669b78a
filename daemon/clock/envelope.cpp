#include "clock/envelope.h"

#include <algorithm>
#include <array>
#include <cmath>

#include "core/assert.h"

namespace kedge::clock {
namespace {

constexpr std::int64_t us_per_s = 1'000'000;

/// Crystals of small devices over temperature, one sigma with room to spare; and beyond all of them.
constexpr double slope_sigma = 100e-6;
constexpr double slope_max = 300e-6;
/// Stamps of device and kernel are no better than this.
constexpr double scatter_ns_min = 50e3;
/// Of the height before anything is known of the link, shrinking with each second seen.
constexpr double first_sigma_ns = 20e6;

/// A slope out of fewer points is mostly jitter.
constexpr std::size_t fit_seconds_min = 4;
/// A window that long knows the slope to a few ppm on any usable link.
constexpr std::int64_t long_window_us = 60 * us_per_s;

std::int64_t second_of(std::int64_t device_us) { return device_us / us_per_s - (device_us % us_per_s < 0 ? 1 : 0); }

}  // namespace

double Envelope::at(std::int64_t device_us) const {
  return height_ns_ + slope_ * 1e3 * static_cast<double>(device_us - origin_us_);
}

double Envelope::above_line(const Point& point) const {
  return static_cast<double>(point.delay_ns) - at(point.device_us);
}

void Envelope::restart() {
  lowest_.clear();
  empty_ = true;
  scatter_ns_ = 0.0;
}

void Envelope::add(std::int64_t device_us, std::int64_t delay_ns) {
  const Point point{device_us, delay_ns};
  if (empty_) {
    empty_ = false;
    open_ = point;
    origin_us_ = device_us;
    height_ns_ = static_cast<double>(delay_ns);
    return;
  }
  height_ns_ += std::min(0.0, above_line(point));
  const std::int64_t second = second_of(device_us);
  const std::int64_t open_second = second_of(open_.device_us);
  if (second > open_second) {
    lowest_.push_back(open_);
    open_ = point;
    fit();
  } else if (second == open_second && above_line(point) < above_line(open_)) {
    open_ = point;
  }
}

void Envelope::fit() {
  const std::int64_t newest_us = lowest_.back().device_us;
  while (newest_us - lowest_.front().device_us > static_cast<std::int64_t>(window_s) * us_per_s) lowest_.pop_front();
  const std::size_t count = lowest_.size();
  const std::int64_t span_us = newest_us - lowest_.front().device_us;
  if (count >= fit_seconds_min) {
    // What the points cannot tell, what is known of crystals must: Gaussian product of the two. The line
    // rests on the lowest point of either half, which is closer to the edge the more there are.
    const double edge_ns = 4.0 * std::max(scatter_ns_, scatter_ns_min) / static_cast<double>(count);
    const double noise = edge_ns / (0.5e3 * static_cast<double>(span_us));
    const double trust = slope_sigma * slope_sigma / (slope_sigma * slope_sigma + noise * noise);
    slope_ = std::clamp(slope_prior_ + trust * (hull_slope() - slope_prior_), -slope_max, slope_max);
    if (span_us >= long_window_us) slope_prior_ = slope_;
  }
  origin_us_ = newest_us;
  height_ns_ = static_cast<double>(lowest_.back().delay_ns);
  double sum_ns = 0.0;
  double least_ns = 0.0;
  for (std::size_t i = 0; i < count; ++i) {
    const double above_ns = above_line(lowest_[i]);
    sum_ns += above_ns;
    least_ns = std::min(least_ns, above_ns);
  }
  height_ns_ += least_ns;
  // The line touches about two of the points by construction.
  const auto free = static_cast<double>(count > 2 ? count - 2 : 1);
  scatter_ns_ = (sum_ns - static_cast<double>(count) * least_ns) / free;
  height_ns_ += std::min(0.0, above_line(open_));
}

double Envelope::hull_slope() const {
  const std::size_t count = lowest_.size();
  const std::int64_t first_us = lowest_.front().device_us;
  const std::int64_t first_ns = lowest_.front().delay_ns;
  std::array<std::size_t, window_s> hull{};
  std::array<double, window_s> x_us{};
  std::array<double, window_s> y_ns{};
  std::size_t size = 0;
  double mean_us = 0.0;
  for (std::size_t i = 0; i < count; ++i) {
    x_us[i] = static_cast<double>(lowest_[i].device_us - first_us);
    y_ns[i] = static_cast<double>(lowest_[i].delay_ns - first_ns);
    mean_us += x_us[i] / static_cast<double>(count);
    const auto not_below = [&](std::size_t a, std::size_t b) {
      return (y_ns[b] - y_ns[a]) * (x_us[i] - x_us[a]) >= (y_ns[i] - y_ns[a]) * (x_us[b] - x_us[a]);
    };
    while (size >= 2 && not_below(hull[size - 2], hull[size - 1])) --size;
    hull[size++] = i;
  }
  KEDGE_ASSERT(size >= 2);
  std::size_t right = 1;
  while (right + 1 < size && x_us[hull[right]] < mean_us) ++right;
  const std::size_t a = hull[right - 1];
  const std::size_t b = hull[right];
  return (y_ns[b] - y_ns[a]) / (1e3 * (x_us[b] - x_us[a]));
}

double Envelope::sigma_ns() const {
  const auto count = static_cast<double>(std::max<std::size_t>(lowest_.size(), 1));
  return std::hypot(first_sigma_ns / count, scatter_ns_ / std::sqrt(count));
}

}  // namespace kedge::clock
