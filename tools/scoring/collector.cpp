#include "scoring/collector.h"

#include <cmath>

#include "core/time.h"

namespace kedge::scoring {

void Collector::take(const feed::v1::Message& message) {
  if (message.has_position()) take_position(message.position());
  if (message.has_speed()) take_speed(message.speed());
}

void Collector::take_position(const feed::v1::Position& position) {
  Sample sample;
  sample.t_s = seconds(position.time_ns());
  sample.standing = position.standing();
  if (std::isfinite(position.east_m()) && std::isfinite(position.north_m()) && position.has_east_m() &&
      position.has_north_m()) {
    sample.position_m = Vector2(position.east_m(), position.north_m());
    if (position.covariance_m2_size() == 6) {  // ee en eu nn nu uu
      sample.covariance_m2 << position.covariance_m2(0), position.covariance_m2(1), position.covariance_m2(1),
          position.covariance_m2(3);
    }
    if (position.has_probability()) sample.probability = position.probability();
  }
  samples_[position.tag()].push_back(sample);
}

void Collector::take_speed(const feed::v1::Speed& speed) {
  const auto found = samples_.find(speed.tag());
  // A speed follows the position of its instant; one without it has no standing to score it by.
  if (found == samples_.end() || found->second.back().t_s != seconds(speed.time_ns())) return;
  if (speed.has_speed_mps() && std::isfinite(speed.speed_mps())) found->second.back().speed_mps = speed.speed_mps();
}

}  // namespace kedge::scoring
