#include "convert/to_capture.h"

#include <fmt/core.h>

#include <algorithm>
#include <vector>

#include "app/processor.h"
#include "capture/capture_writer.h"
#include "capture/file_sink.h"
#include "config/print.h"
#include "config/settings.h"
#include "core/build_info.h"
#include "proto/station.pb.h"
#include "wire/decode.h"
#include "wire/encode.h"

namespace kedge::convert {

namespace {

constexpr SourceId link_source = 1;
constexpr std::uint16_t first_sender_port = 47900;
constexpr TimeNs utc_begin_ns = 1'767'225'600 * ns_per_s;  // 2026-01-01
constexpr TimeNs looks_like_utc_ns = 1'000'000'000 * ns_per_s;
constexpr TimeNs device_lead_ns = 1000 * ns_per_s;

/// UTC minus the time of the logs.
TimeNs utc_offset(TimeNs first_ns) { return first_ns >= looks_like_utc_ns ? 0 : utc_begin_ns - first_ns; }

/// What a station would say to each packet.
class Door final : public wire::PacketSink {
 public:
  explicit Door(double propagation_speed_mps) : decoder_(propagation_speed_mps) {}

  /// Empty: it passes.
  const std::string& objection(std::span<const std::byte> datagram) {
    text_.clear();
    decoder_.decode(datagram, *this);
    return text_;
  }
  void packet(const wire::Packet&) override {}
  void refused(const wire::Refusal& refusal) override { text_ = refusal.text; }

 private:
  wire::Decoder decoder_;
  std::string text_;
};

capture::CaptureHead head_for(const config::v1::Configuration& configuration, TimeNs first_ns) {
  capture::CaptureHead head;
  head.program = "kedge-convert";
  head.version = version();
  head.build = build_identification();
  head.features = app::processor_features();
  head.configuration = config::print(configuration);
  head.utc_minus_monotonic_ns = utc_offset(first_ns);
  head.links = {{configuration.links(0).name(), capture::LinkKind::udp}};
  return head;
}

capture::UdpPath path_of(std::uint32_t tag, const config::v1::Configuration& configuration) {
  const std::array<std::uint8_t, 16> loopback = {127, 0, 0, 1};
  return {capture::Family::v4,
          {loopback, static_cast<std::uint16_t>(first_sender_port + tag)},
          {loopback, static_cast<std::uint16_t>(configuration.links(0).udp().port())}};
}

/// Numbers the records of each source.
class Recorder {
 public:
  explicit Recorder(capture::CaptureWriter& writer) : writer_(writer) {}

  Status station(TimeNs time_ns, const station::v1::StationRecord& record) {
    const std::string text = record.SerializeAsString();
    return writer_.write({{time_ns, station_source, station_records_++, std::as_bytes(std::span(text))}, {}});
  }
  Status datagram(TimeNs time_ns, std::span<const std::byte> bytes, const capture::UdpPath& path) {
    return writer_.write({{time_ns, link_source, datagrams_++, bytes}, path});
  }

 private:
  capture::CaptureWriter& writer_;
  std::uint64_t station_records_ = 0;
  std::uint64_t datagrams_ = 0;
};

Status write_opening(Recorder& recorder, TimeNs first_ns) {
  station::v1::StationRecord record;
  record.mutable_utc_offset()->set_utc_minus_monotonic_ns(utc_offset(first_ns));
  if (Status status = recorder.station(first_ns, record); !status) return status;
  record.mutable_link_state()->set_source(link_source);
  record.mutable_link_state()->set_open(true);
  return recorder.station(first_ns, record);
}

/// The first multiple of the step at or after that time.
TimeNs next_multiple(TimeNs time_ns, TimeNs step_ns) {
  const TimeNs below = time_ns - ((time_ns % step_ns) + step_ns) % step_ns;
  return below == time_ns ? time_ns : below + step_ns;
}

}  // namespace

Result<ToCapture> write_capture(const LogFolder& folder, const config::v1::Configuration& configuration,
                                const std::string& path) {
  const pipeline::Settings settings = config::settings_from(configuration);
  const TimeNs first_ns = folder.events().front().time_ns;
  capture::FileSink file;
  if (Status status = file.create(path); !status) return Error{status.error()};
  auto writer = capture::CaptureWriter::begin(file, head_for(configuration, first_ns));
  if (!writer) return Error{writer.error()};
  Recorder recorder(*writer);
  if (Status status = write_opening(recorder, first_ns); !status) return Error{status.error()};

  ToCapture done;
  Door door(settings.site.propagation_speed_mps);
  station::v1::StationRecord tick;
  tick.mutable_tick();
  TimeNs tick_ns = next_multiple(first_ns, settings.limits.tick_ns);
  std::vector<std::uint32_t> sequences(folder.tags().size());
  packets::v1::Datagram datagram;
  for (const LogEvent& event : folder.events()) {
    for (; tick_ns <= event.time_ns; tick_ns += settings.limits.tick_ns) {
      if (Status status = recorder.station(tick_ns, tick); !status) return Error{status.error()};
    }
    datagram.Clear();
    packets::v1::Packet& packet = *datagram.add_packets();
    packet = folder.packet(event);
    packet.set_device_id(folder.tags()[event.tag].device_id);
    packet.set_sequence(sequences[event.tag]++);
    const TimeNs device_ns = event.time_ns - std::min(first_ns, TimeNs{0}) / ns_per_s * ns_per_s + device_lead_ns;
    packet.set_device_time_us(static_cast<std::uint64_t>((device_ns + ns_per_us / 2) / ns_per_us));
    const std::vector<std::byte> bytes = wire::encode(datagram);
    ++done.packets;
    if (const std::string& objection = door.objection(bytes); !objection.empty() && done.refused++ == 0) {
      done.first_refusal = folder.place(event) + ": " + objection;
    }
    if (Status status = recorder.datagram(event.time_ns, bytes, path_of(event.tag, configuration)); !status) {
      return Error{status.error()};
    }
  }
  // One more, so that what came last is published.
  if (Status status = recorder.station(tick_ns, tick); !status) return Error{status.error()};
  if (Status status = file.close(); !status) return Error{status.error()};
  return done;
}

}  // namespace kedge::convert
