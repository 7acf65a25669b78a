#include "simulate/to_capture.h"

#include <arpa/inet.h>
#include <fmt/core.h>

#include <algorithm>

#include "app/processor.h"
#include "capture/capture_writer.h"
#include "capture/file_sink.h"
#include "config/print.h"
#include "config/settings.h"
#include "core/build_info.h"
#include "proto/station.pb.h"
#include "simulate/truth_writer.h"
#include "simulation/packets.h"
#include "wire/encode.h"

namespace kedge::simulate {

namespace {

// 2026-01-01 00:00:00 UTC at the beginning of a run: invented, and the same every time.
constexpr TimeNs utc_at_start_ns = 1'767'225'600 * ns_per_s;
constexpr std::uint16_t first_sender_port = 47900;

/// Writes records with their numbers, the station's among them.
class Recorder {
 public:
  Recorder(capture::CaptureWriter writer, std::size_t sources) : writer_(std::move(writer)), sequences_(sources) {}

  [[nodiscard]] Status write(TimeNs time_ns, SourceId source, std::span<const std::byte> bytes,
                             const capture::UdpPath& path) {
    return writer_.write({{time_ns, source, sequences_.at(source)++, bytes}, path});
  }
  [[nodiscard]] Status write(TimeNs time_ns, const station::v1::StationRecord& record) {
    const std::string text = record.SerializeAsString();
    return write(time_ns, station_source, std::as_bytes(std::span(text)), {});
  }
  [[nodiscard]] Status flush() { return writer_.flush(); }

 private:
  capture::CaptureWriter writer_;
  std::vector<std::uint64_t> sequences_;
};

struct Routes {
  SourceId udp = 0;  ///< 0: the configuration has none
  SourceId serial = 0;
  capture::UdpPath path;
};

Routes routes_of(const config::v1::Configuration& configuration) {
  Routes routes;
  for (int i = configuration.links_size() - 1; i >= 0; --i) {
    const config::v1::Link& link = configuration.links(i);
    const auto source = static_cast<SourceId>(i + 1);
    if (link.has_serial()) routes.serial = source;
    if (!link.has_udp()) continue;
    routes.udp = source;
    routes.path = {};
    const std::string address = link.udp().address().empty() ? "127.0.0.1" : link.udp().address();
    const bool v6 = address.find(':') != std::string::npos;
    routes.path.family = v6 ? capture::Family::v6 : capture::Family::v4;
    inet_pton(v6 ? AF_INET6 : AF_INET, address.c_str(), routes.path.to.address.data());
    routes.path.to.port = static_cast<std::uint16_t>(link.udp().port());
    routes.path.from.address = routes.path.to.address;
  }
  return routes;
}

Status write_opening(const Routes& routes, TimeNs start_ns, Recorder& recorder) {
  station::v1::StationRecord record;
  record.mutable_utc_offset()->set_utc_minus_monotonic_ns(utc_at_start_ns - start_ns);
  record.mutable_utc_offset()->set_synchronised(true);
  if (Status written = recorder.write(start_ns, record); !written) return written;
  for (const SourceId source : {routes.udp, routes.serial}) {
    if (source == 0) continue;
    record.mutable_link_state()->set_source(source);
    record.mutable_link_state()->set_open(true);
    if (Status written = recorder.write(start_ns, record); !written) return written;
  }
  return {};
}

Status write_records(const Plan& plan, const Routes& routes, TimeNs tick_ns, Recorder& recorder) {
  station::v1::StationRecord tick;
  tick.mutable_tick();
  TimeNs next_tick_ns = plan.specs.front().start_ns + tick_ns;
  simulation::Fleet fleet(plan.specs);
  while (const auto arrival = fleet.next()) {
    for (; next_tick_ns <= arrival->time_ns; next_tick_ns += tick_ns) {
      if (Status written = recorder.write(next_tick_ns, tick); !written) return written;
    }
    Status written;
    if (plan.serial_tag == arrival->tag) {
      written = recorder.write(arrival->time_ns, routes.serial, wire::frame(arrival->bytes), {});
    } else {
      capture::UdpPath path = routes.path;
      path.from.port = static_cast<std::uint16_t>(first_sender_port + arrival->tag);
      written = recorder.write(arrival->time_ns, routes.udp, arrival->bytes, path);
    }
    if (!written) return written;
  }
  return {};
}

}  // namespace

Status write_capture(const Options& options, const Plan& plan) {
  const Routes routes = routes_of(plan.configuration);
  if (routes.udp == 0 && (!plan.serial_tag || plan.specs.size() > 1)) {
    return Error{"the configuration has no UDP link for the tags to arrive on"};
  }
  if (plan.serial_tag && routes.serial == 0) return Error{"the configuration has no serial link"};
  const pipeline::Settings settings = config::settings_from(plan.configuration);
  const TimeNs start_ns = plan.specs.front().start_ns;

  capture::CaptureHead head;
  head.program = "kedge-simulate";
  head.version = version();
  head.build = build_identification();
  head.features = app::processor_features();
  head.configuration = config::print(plan.configuration);
  head.utc_minus_monotonic_ns = utc_at_start_ns - start_ns;
  for (const pipeline::LinkSettings& link : settings.links) {
    const bool udp = link.kind == pipeline::LinkKind::udp;
    head.links.push_back({link.name, udp ? capture::LinkKind::udp : capture::LinkKind::serial});
  }

  TruthWriter truth(plan.specs);
  if (Status opened = truth.open(options.truth); !opened) return opened;
  capture::FileSink file;
  if (Status created = file.create(options.capture); !created) return created;
  auto writer = capture::CaptureWriter::begin(file, head);
  if (!writer) return Error{writer.error()};
  Recorder recorder(*std::move(writer), settings.links.size() + 1);
  if (Status written = write_opening(routes, start_ns, recorder); !written) return written;
  if (Status written = write_records(plan, routes, settings.limits.tick_ns, recorder); !written) return written;
  if (Status flushed = recorder.flush(); !flushed) return flushed;
  if (Status closed = file.close(); !closed) return closed;
  truth.advance(start_ns + from_seconds(plan.specs.front().duration_s));
  return truth.close();
}

}  // namespace kedge::simulate
