// A radio link and a device clock, made badly on purpose and the same for the same seed: least delay
// (and a change of it: the two directions of a link need not agree, and routes change), jitter, rare
// long delays, loss, duplicates, reordering (from the delays), clock offset, skew, drift, step and wrap.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <random>
#include <vector>

#include "core/time.h"

namespace kedge::test {

struct DeviceClockModel {
  double skew_ppm = 0.0;           ///< positive: fast
  double drift_ppm_per_min = 0.0;  ///< change of the skew
  double offset_us = 0.0;          ///< reading at time 0
  double jump_at_s = 1e18;         ///< the counter jumps here once...
  double jump_us = 0.0;            ///< ...by this much
  unsigned bits = 64;

  [[nodiscard]] std::uint64_t read_us(double time_s) const {
    const double skewed_s = time_s * (skew_ppm + 0.5 * drift_ppm_per_min * time_s / 60.0) * 1e-6;
    const double jumped_us = time_s >= jump_at_s ? jump_us : 0.0;
    const auto reading = static_cast<std::int64_t>(std::floor(offset_us + jumped_us + (time_s + skewed_s) * 1e6));
    const auto raw = static_cast<std::uint64_t>(reading);
    return bits == 64 ? raw : raw & ((std::uint64_t{1} << bits) - 1);
  }
};

struct LinkModel {
  double delay_s = 0.002;  ///< least
  double delay_change_at_s = 1e18;
  double delay_change_s = 0.0;
  double jitter_mean_s = 0.005;  ///< exponential, on top
  double late_share = 0.0;       ///< delayed by up to late_s more
  double late_s = 0.0;
  double loss_share = 0.0;
  double duplicate_share = 0.0;
};

struct Arrival {
  double sent_s = 0.0;  ///< truth
  std::uint64_t device_time_us = 0;
  std::uint32_t sequence = 0;
  TimeNs arrival_ns = 0;
};

/// Packets sent every 1/rate_hz (and a little beside it) from 0 to duration_s, in order of arrival.
/// Station time is truth plus station_origin_ns.
inline std::vector<Arrival> carry(const DeviceClockModel& clock, const LinkModel& link, double rate_hz,
                                  double duration_s, std::uint64_t seed, TimeNs station_origin_ns = 1'000 * ns_per_s) {
  std::mt19937_64 random(seed);
  // The standard's distributions differ between libraries; its engines do not.
  const auto uniform = [&] { return static_cast<double>(random() >> 11) * 0x1p-53; };
  const auto delay_s = [&](double sent_s) {
    const double least_s = link.delay_s + (sent_s >= link.delay_change_at_s ? link.delay_change_s : 0.0);
    const double late_s = uniform() < link.late_share ? link.late_s * (0.5 + 0.5 * uniform()) : 0.0;
    return least_s - link.jitter_mean_s * std::log(1.0 - uniform()) + late_s;
  };
  std::vector<Arrival> arrivals;
  std::uint32_t sequence = 0;
  for (double at_s = 0.0; at_s < duration_s; at_s += 1.0 / rate_hz) {
    const double sent_s = at_s + 0.1 * uniform() / rate_hz;
    Arrival packet{sent_s, clock.read_us(sent_s), sequence++, 0};
    const int copies = uniform() < link.loss_share ? 0 : (uniform() < link.duplicate_share ? 2 : 1);
    for (int i = 0; i < copies; ++i) {
      packet.arrival_ns = station_origin_ns + from_seconds(sent_s + delay_s(sent_s));
      arrivals.push_back(packet);
    }
  }
  std::stable_sort(arrivals.begin(), arrivals.end(),
                   [](const Arrival& a, const Arrival& b) { return a.arrival_ns < b.arrival_ns; });
  return arrivals;
}

}  // namespace kedge::test
