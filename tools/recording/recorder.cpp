#include "recording/recorder.h"

#include <utility>

#include "app/processor.h"
#include "config/print.h"
#include "core/build_info.h"

namespace kedge::recording {

namespace {

capture::CaptureHead head_of(const config::v1::Configuration& configuration, const Opening& opening) {
  capture::CaptureHead head;
  head.program = opening.program;
  head.version = version();
  head.build = build_identification();
  head.features = app::processor_features();
  head.configuration = config::print(configuration);
  head.utc_minus_monotonic_ns = opening.utc_minus_monotonic_ns;
  for (const config::v1::Link& link : configuration.links()) {
    head.links.push_back({link.name(), link.has_udp() ? capture::LinkKind::udp : capture::LinkKind::serial});
  }
  return head;
}

}  // namespace

Result<Recorder> Recorder::create(const std::filesystem::path& path, const config::v1::Configuration& configuration,
                                  const Opening& opening) {
  const capture::CaptureHead head = head_of(configuration, opening);
  auto file = std::make_unique<capture::FileSink>();
  if (Status created = file->create(path); !created) return Error{created.error()};
  auto writer = capture::CaptureWriter::begin(*file, head);
  if (!writer) return Error{writer.error()};
  Recorder recorder(std::move(file), *std::move(writer), head.links.size() + 1);
  if (Status opened = recorder.open(opening); !opened) return Error{opened.error()};
  return recorder;
}

Status Recorder::open(const Opening& opening) {
  station::v1::StationRecord record;
  record.mutable_utc_offset()->set_utc_minus_monotonic_ns(opening.utc_minus_monotonic_ns);
  record.mutable_utc_offset()->set_synchronised(opening.synchronised);
  if (Status written = station(opening.time_ns, record); !written) return written;
  for (const SourceId source : opening.links) {
    record.mutable_link_state()->set_source(source);
    record.mutable_link_state()->set_open(true);
    if (Status written = station(opening.time_ns, record); !written) return written;
  }
  return {};
}

Status Recorder::station(TimeNs time_ns, const station::v1::StationRecord& record) {
  const std::string text = record.SerializeAsString();
  return input(time_ns, station_source, std::as_bytes(std::span(text)), {});
}

Status Recorder::tick(TimeNs time_ns) {
  station::v1::StationRecord record;
  record.mutable_tick();
  return station(time_ns, record);
}

Status Recorder::input(TimeNs time_ns, SourceId source, std::span<const std::byte> bytes,
                       const capture::UdpPath& path) {
  return writer_.write({{time_ns, source, sequences_.at(source)++, bytes}, path});
}

}  // namespace kedge::recording
