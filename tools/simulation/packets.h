// What reaches the station: the datagrams of one tag or of a fleet, delayed, repeated, overtaken or
// lost on the way, in order of arrival.
#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <queue>
#include <vector>

#include "proto/packets.pb.h"
#include "simulation/scenario.h"
#include "simulation/sensors.h"
#include "simulation/two_way.h"

namespace kedge::simulation {

struct Arrival {
  TimeNs time_ns = 0;            ///< station time of arrival
  std::uint32_t tag = 0;         ///< index of the tag's specification
  std::vector<std::byte> bytes;  ///< a Datagram
};

/// The device's own microsecond counter.
class DeviceClock {
 public:
  explicit DeviceClock(const ScenarioSpec& spec);

  [[nodiscard]] std::uint64_t reading_us(TimeNs time_ns) const;
  /// Starts again from 0 at that time.
  void restart(TimeNs time_ns);
  [[nodiscard]] double skew_ppm() const { return skew_ppm_; }

 private:
  TimeNs zero_ns_;
  std::uint64_t origin_us_ = 0;
  double skew_ppm_;
  bool wraps_;
};

class PacketStream {
 public:
  explicit PacketStream(const ScenarioSpec& spec, std::uint32_t tag = 0);

  [[nodiscard]] std::optional<Arrival> next();
  [[nodiscard]] const Sensors& sensors() const { return sensors_; }
  [[nodiscard]] const DeviceClock& clock() const { return clock_; }

 private:
  struct Queued {
    Arrival arrival;
    std::uint64_t number = 0;
  };
  struct Later {
    bool operator()(const Queued& a, const Queued& b) const {
      return a.arrival.time_ns != b.arrival.time_ns ? a.arrival.time_ns > b.arrival.time_ns : a.number > b.number;
    }
  };

  void take(const Reading& reading);
  void take_inertial(TimeNs time_ns, const InertialReading& reading);
  void take_range(TimeNs time_ns, const RangeReading& reading);
  packets::v1::Packet& new_packet(packets::v1::Datagram& datagram, TimeNs time_ns);
  void send(TimeNs time_ns, const packets::v1::Datagram& datagram);
  void enqueue(TimeNs time_ns, std::vector<std::byte> bytes);
  void restart(TimeNs time_ns);

  ScenarioSpec spec_;
  std::uint32_t tag_;
  Sensors sensors_;
  DeviceClock clock_;
  Random link_random_;
  std::vector<RadioCounter> counters_;  ///< the tag's own, then each anchor's
  packets::v1::Packet batch_;           ///< being filled; empty between batches
  packets::v1::Datagram bundle_;        ///< rangings that wait for the batch, where bundled
  std::uint32_t sequence_ = 0;
  std::optional<TimeNs> restart_ns_;
  std::priority_queue<Queued, std::vector<Queued>, Later> queue_;
  std::uint64_t queued_ = 0;
  std::optional<Reading> ahead_;  ///< nothing sent from here on can arrive before it
};

/// Several tags on one station.
class Fleet {
 public:
  explicit Fleet(const std::vector<ScenarioSpec>& specs);

  /// In order of arrival, then of tag.
  [[nodiscard]] std::optional<Arrival> next();

 private:
  std::vector<PacketStream> streams_;
  std::vector<std::optional<Arrival>> heads_;
};

}  // namespace kedge::simulation
