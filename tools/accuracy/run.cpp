#include "accuracy/run.h"

#include <vector>

#include "pipeline/engine.h"
#include "proto/station.pb.h"
#include "simulation/packets.h"
#include "simulation/vehicle.h"

namespace kedge::accuracy {

namespace {

constexpr SourceId radio_source = 1;

/// Keeps what the engine says about the one tag.
class Samples final : public pipeline::ReportSink {
 public:
  void utc_offset(TimeNs) override {}
  void publish(const pipeline::TrackReport& report) override {
    scoring::Sample sample;
    sample.t_s = seconds(report.estimate.time_ns);
    sample.standing = static_cast<scoring::Standing>(report.standing);  // the same numbers
    const fusion::Phase phase = report.estimate.phase;
    if (phase == fusion::Phase::twofold || phase == fusion::Phase::single) {
      const fusion::Mode& lead = report.estimate.lead;
      sample.position_m = lead.position_m.head<2>();
      sample.covariance_m2 = lead.position_covariance_m2.topLeftCorner<2, 2>();
      sample.probability = lead.probability;
      sample.speed_mps = lead.velocity_mps.head<2>().norm();
    }
    samples.push_back(sample);
  }
  void publish(const pipeline::TagHealthReport&) override {}
  void publish(const pipeline::AnchorHealthReport&) override {}
  void publish(const pipeline::StationHealthReport&) override {}
  void publish(const pipeline::PulseReport&) override {}
  void verdict(const pipeline::Verdict&) override {}

  std::vector<scoring::Sample> samples;
};

pipeline::Settings settings_for(const simulation::ScenarioSpec& spec, fusion::Method method) {
  pipeline::Settings settings;
  settings.site = spec.site;
  pipeline::TagSettings tag;
  tag.model = simulation::tag_of(spec, true);
  tag.model.method = method;
  tag.device_id = spec.device_id;
  tag.R_sensor_to_body = spec.q_sensor_to_body.toRotationMatrix();
  settings.tags.push_back(tag);
  settings.links.push_back({"radio", pipeline::LinkKind::udp});
  return settings;
}

scoring::Track truth_of(const simulation::ScenarioSpec& spec) {
  const simulation::Vehicle vehicle(spec);
  scoring::Track track;
  const TimeNs end_ns = spec.start_ns + from_seconds(spec.duration_s);
  for (TimeNs t_ns = spec.start_ns; t_ns <= end_ns; t_ns += 50 * ns_per_ms) {
    const simulation::Truth truth = vehicle.at(t_ns);
    track.add(seconds(t_ns), truth.position_m, truth.velocity_mps.head<2>(), true);
  }
  return track;
}

}  // namespace

scoring::Figures score_run(const simulation::ScenarioSpec& spec, fusion::Method method) {
  Samples samples;
  const pipeline::Settings settings = settings_for(spec, method);
  pipeline::Engine engine(settings, samples);
  station::v1::StationRecord tick;
  tick.mutable_tick();
  const std::string tick_bytes = tick.SerializeAsString();
  TimeNs next_tick_ns = spec.start_ns + settings.limits.tick_ns;
  std::uint64_t ticks = 0;
  std::uint64_t datagrams = 0;
  simulation::PacketStream stream(spec);
  while (const auto arrival = stream.next()) {
    for (; next_tick_ns <= arrival->time_ns; next_tick_ns += settings.limits.tick_ns) {
      engine.accept({next_tick_ns, station_source, ticks++, std::as_bytes(std::span(tick_bytes))});
    }
    engine.accept({arrival->time_ns, radio_source, datagrams++, arrival->bytes});
  }
  if (samples.samples.empty()) return {};
  return scoring::figures_of(samples.samples, truth_of(spec), scoring::second_half(samples.samples));
}

}  // namespace kedge::accuracy
