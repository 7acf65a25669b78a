// A station for tests: simulated tags into a real engine, ticks in between, reports kept.
#pragma once

#include <span>
#include <string>
#include <vector>

#include "pipeline/engine.h"
#include "proto/station.pb.h"
#include "simulation/packets.h"

namespace kedge::test {

class Reports : public pipeline::ReportSink {
 public:
  void utc_offset(TimeNs utc_minus_monotonic_ns) override { offset_ns = utc_minus_monotonic_ns; }
  void publish(const pipeline::TrackReport& report) override { tracks.push_back(report); }
  void publish(const pipeline::TagHealthReport& report) override { tags.push_back(report); }
  void publish(const pipeline::AnchorHealthReport& report) override { anchors.push_back(report); }
  void publish(const pipeline::StationHealthReport& report) override { stations.push_back(report); }
  void publish(const pipeline::PulseReport& report) override { pulses.push_back(report); }
  void verdict(const pipeline::Verdict& verdict) override {
    verdicts.push_back(verdict);
    texts.emplace_back(verdict.text);
  }

  [[nodiscard]] std::size_t count(pipeline::VerdictCode code) const {
    std::size_t n = 0;
    for (const pipeline::Verdict& verdict : verdicts) n += verdict.code == code ? 1 : 0;
    return n;
  }
  [[nodiscard]] std::vector<pipeline::TagHealthReport> of_tag(std::uint32_t tag) const {
    std::vector<pipeline::TagHealthReport> found;
    for (const auto& report : tags) {
      if (report.tag == tag) found.push_back(report);
    }
    return found;
  }

  TimeNs offset_ns = 0;
  std::vector<pipeline::TrackReport> tracks;
  std::vector<pipeline::TagHealthReport> tags;
  std::vector<pipeline::AnchorHealthReport> anchors;
  std::vector<pipeline::StationHealthReport> stations;
  std::vector<pipeline::PulseReport> pulses;
  std::vector<pipeline::Verdict> verdicts;
  std::vector<std::string> texts;
};

inline bool has(const pipeline::Concerns& concerns, pipeline::Concern concern) {
  for (std::size_t i = 0; i < concerns.size(); ++i) {
    if (concerns[i].concern == concern) return true;
  }
  return false;
}

/// One UDP link; the tags of the specifications, all on the first one's site.
inline pipeline::Settings settings_of(const std::vector<simulation::ScenarioSpec>& specs, bool known_start = true) {
  pipeline::Settings settings;
  settings.site = specs.front().site;
  settings.links.push_back({"radio", pipeline::LinkKind::udp});
  for (const simulation::ScenarioSpec& spec : specs) {
    pipeline::TagSettings tag;
    tag.model = simulation::tag_of(spec, known_start);
    tag.device_id = spec.device_id;
    tag.R_sensor_to_body = spec.q_sensor_to_body.toRotationMatrix();
    settings.tags.push_back(tag);
  }
  return settings;
}

/// Feeds records and keeps their numbering.
class Feeder {
 public:
  explicit Feeder(pipeline::Engine& engine) : engine_(engine) {}

  void datagram(TimeNs time_ns, std::span<const std::byte> bytes) { engine_.accept({time_ns, 1, packets_++, bytes}); }
  void station(TimeNs time_ns, const station::v1::StationRecord& record) {
    const std::string bytes = record.SerializeAsString();
    engine_.accept({time_ns, station_source, records_++, std::as_bytes(std::span(bytes))});
  }
  void tick(TimeNs time_ns) {
    station::v1::StationRecord record;
    record.mutable_tick();
    station(time_ns, record);
  }

  /// Everything of the fleet up to `until_ns`, with a tick each 100 ms. `keep` says which arrivals reach the
  /// station.
  template <class Keep>
  void run(simulation::Fleet& fleet, TimeNs until_ns, Keep keep) {
    while (auto arrival = ahead_ ? std::exchange(ahead_, std::nullopt) : fleet.next()) {
      if (!next_tick_ns_) next_tick_ns_ = arrival->time_ns;
      while (*next_tick_ns_ <= arrival->time_ns && *next_tick_ns_ <= until_ns) step();
      if (arrival->time_ns > until_ns) {
        ahead_ = std::move(arrival);
        return;
      }
      if (keep(*arrival)) datagram(arrival->time_ns, arrival->bytes);
    }
    while (next_tick_ns_ && *next_tick_ns_ <= until_ns) step();
  }
  void run(simulation::Fleet& fleet, TimeNs until_ns) {
    run(fleet, until_ns, [](const simulation::Arrival&) { return true; });
  }

 private:
  void step() {
    tick(*next_tick_ns_);
    *next_tick_ns_ += 100 * ns_per_ms;
  }

  pipeline::Engine& engine_;
  std::optional<simulation::Arrival> ahead_;
  std::optional<TimeNs> next_tick_ns_;
  std::uint64_t packets_ = 0;
  std::uint64_t records_ = 0;
};

}  // namespace kedge::test
