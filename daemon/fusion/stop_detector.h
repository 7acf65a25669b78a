// Standing still is the strongest thing an inertial unit can say: speed zero, bias visible.
//
// Zero-velocity detection after Skog, Handel, Nilsson, Rantakokko, IEEE Trans. BME 57, 2010: the
// generalised likelihood ratio of "no rotation, only gravity", here about the window's own means so
// that biases do not count (MATHEMATICS.md, eq. 15). Constant speed without vibration looks the same to
// it, so whoever asks must ask the ranges too.
#pragma once

#include "core/ring.h"
#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

class StopDetector {
 public:
  /// One inertial sample, body axes; calls in order of time.
  void add(TimeNs time_ns, const Vector3& specific_force_mps2, const Vector3& angular_rate_radps);
  void clear() { blocks_.clear(); }

  /// True when the last half second shows nothing but gravity and a constant gyroscope bias.
  /// gravity_mps2: of the site.
  [[nodiscard]] bool quiet(double gravity_mps2) const;

  /// The accelerometer's half of it alone: what it shows is gravity, whichever way the tag turns.
  [[nodiscard]] bool calm(double gravity_mps2) const;

  /// A full window that is not at rest by any reading.
  [[nodiscard]] bool loud() const;

  /// Mean specific force of the window; zero without one.
  [[nodiscard]] Vector3 mean_force_mps2() const;

  /// The test statistic: 1 on average for the noise assumed at rest; large: moving. Needs a full window.
  [[nodiscard]] double statistic() const;

  template <class Archive>
  void fields(Archive& archive) {
    archive(blocks_);
  }

  // Noise of one sample assumed at rest: a floor over common low-cost units.
  static constexpr double rest_accel_sigma_mps2 = 0.03;
  static constexpr double rest_gyro_sigma_radps = 0.004;
  static constexpr double statistic_max = 4.0;

 private:
  /// Sums over 0.1 s: the statistic needs no single samples.
  struct Block {
    TimeNs start_ns = 0;
    double count = 0.0;
    Vector3 force_sum = Vector3::Zero();
    Vector3 rate_sum = Vector3::Zero();
    double force_square_sum = 0.0;
    double rate_square_sum = 0.0;

    template <class Archive>
    void fields(Archive& archive) {
      archive(start_ns, count, force_sum, rate_sum, force_square_sum, rate_square_sum);
    }
  };
  [[nodiscard]] Block total() const;

  static constexpr TimeNs block_ns = 100 * ns_per_ms;
  static constexpr std::size_t blocks_wanted = 6;

  Ring<Block, blocks_wanted> blocks_;
};

}  // namespace kedge::fusion
