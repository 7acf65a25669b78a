#include "app/replay_runtime.h"

#include <fmt/format.h>

#include "config/load.h"
#include "config/settings.h"
#include "proto/station.pb.h"

namespace kedge::app {
namespace {

Result<config::v1::Configuration> embedded(const capture::CaptureHead& head) {
  config::Loaded loaded = config::load_text(head.configuration, "configuration in the capture");
  if (loaded.merged) return std::move(*loaded.merged);
  return Error{head.configuration.empty()
                   ? "the capture holds no configuration (its head is damaged?): name one with --config"
                   : fmt::format("{}\nname a configuration with --config", fmt::join(loaded.errors, "\n"))};
}

void accept_gap(Conduit& conduit, TimeNs time_ns, std::uint64_t records_lost) {
  station::v1::StationRecord gap;
  gap.mutable_capture_gap()->set_records_lost(records_lost);
  const std::string bytes = gap.SerializeAsString();
  conduit.accept({time_ns, station_source, 0, std::as_bytes(std::span(bytes))});
}

}  // namespace

Result<pipeline::Settings> replay_settings(const capture::CaptureHead& head,
                                           const std::optional<config::v1::Configuration>& other) {
  pipeline::Settings settings;
  if (other) {
    settings = config::settings_from(*other);
  } else {
    Result<config::v1::Configuration> own = embedded(head);
    if (!own) return Error{own.error()};
    settings = config::settings_from(*own);
  }
  settings.links.clear();
  for (const capture::Link& link : head.links) {
    settings.links.push_back(
        {link.name, link.kind == capture::LinkKind::udp ? pipeline::LinkKind::udp : pipeline::LinkKind::serial});
  }
  return settings;
}

ReplaySummary replay(capture::CaptureReader& reader, Conduit& conduit, const Pace& pace, const DamageLog& damage_log) {
  ReplaySummary summary;
  capture::Arrival arrival;
  std::vector<std::optional<std::uint64_t>> expected(reader.head().links.size() + 1);
  for (capture::Next next = reader.next(arrival); next != capture::Next::end; next = reader.next(arrival)) {
    if (next == capture::Next::damage) {
      ++summary.damaged_places;
      summary.bytes_lost += reader.damage().bytes_lost;
      damage_log(reader.damage());
      continue;
    }
    if (summary.records++ == 0) summary.first_ns = arrival.record.time_ns;
    summary.last_ns = arrival.record.time_ns;
    std::optional<std::uint64_t>& next_number = expected.at(arrival.record.source);
    if (next_number && arrival.record.sequence > *next_number) {
      const std::uint64_t missing = arrival.record.sequence - *next_number;
      summary.records_missing += missing;
      accept_gap(conduit, arrival.record.time_ns, missing);
    }
    next_number = arrival.record.sequence + 1;
    if (pace) pace(arrival.record.time_ns);
    conduit.accept(arrival.record);
  }
  summary.messages = conduit.messages();
  return summary;
}

}  // namespace kedge::app
