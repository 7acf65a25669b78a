#include "fusion/stop_detector.h"

#include <cmath>
#include <limits>

namespace kedge::fusion {

namespace {
// A turn-on bias of 0.5 deg/s (1 sigma) must pass as rest, a slow turn must not.
constexpr double rest_rate_max_radps = radians(2.0);
// Bias and scale of the accelerometer.
constexpr double rest_gravity_error_mps2 = 0.3;
}  // namespace

void StopDetector::add(TimeNs time_ns, const Vector3& specific_force_mps2, const Vector3& angular_rate_radps) {
  if (!blocks_.empty() && time_ns - blocks_.back().start_ns > 3 * block_ns) blocks_.clear();
  if (blocks_.empty() || time_ns - blocks_.back().start_ns >= block_ns) {
    Block block;
    block.start_ns = time_ns;
    blocks_.push_back(block);
  }
  Block& block = blocks_.back();
  block.count += 1.0;
  block.force_sum += specific_force_mps2;
  block.rate_sum += angular_rate_radps;
  block.force_square_sum += specific_force_mps2.squaredNorm();
  block.rate_square_sum += angular_rate_radps.squaredNorm();
}

StopDetector::Block StopDetector::total() const {
  Block sum;
  for (std::size_t i = 0; i < blocks_.size(); ++i) {
    sum.count += blocks_[i].count;
    sum.force_sum += blocks_[i].force_sum;
    sum.rate_sum += blocks_[i].rate_sum;
    sum.force_square_sum += blocks_[i].force_square_sum;
    sum.rate_square_sum += blocks_[i].rate_square_sum;
  }
  return sum;
}

double StopDetector::statistic() const {
  const Block sum = total();
  if (!blocks_.full() || sum.count < 12.0) return std::numeric_limits<double>::infinity();
  const double force_spread = sum.force_square_sum - sum.force_sum.squaredNorm() / sum.count;
  const double rate_spread = sum.rate_square_sum - sum.rate_sum.squaredNorm() / sum.count;
  const double square = force_spread / (rest_accel_sigma_mps2 * rest_accel_sigma_mps2) +
                        rate_spread / (rest_gyro_sigma_radps * rest_gyro_sigma_radps);
  return square / (6.0 * (sum.count - 1.0));
}

Vector3 StopDetector::mean_force_mps2() const {
  const Block sum = total();
  return sum.count > 0.0 ? Vector3(sum.force_sum / sum.count) : Vector3(Vector3::Zero());
}

bool StopDetector::loud() const { return blocks_.full() && statistic() > 4.0 * statistic_max; }

bool StopDetector::calm(double gravity_mps2) const {
  const Block sum = total();
  if (!blocks_.full() || sum.count < 12.0) return false;
  const double spread = (sum.force_square_sum - sum.force_sum.squaredNorm() / sum.count) / (3.0 * (sum.count - 1.0));
  return spread < statistic_max * rest_accel_sigma_mps2 * rest_accel_sigma_mps2 &&
         std::abs((sum.force_sum / sum.count).norm() - gravity_mps2) < rest_gravity_error_mps2;
}

bool StopDetector::quiet(double gravity_mps2) const {
  if (!(statistic() < statistic_max)) return false;
  const Block sum = total();
  return std::abs((sum.force_sum / sum.count).norm() - gravity_mps2) < rest_gravity_error_mps2 &&
         (sum.rate_sum / sum.count).norm() < rest_rate_max_radps;
}

}  // namespace kedge::fusion
