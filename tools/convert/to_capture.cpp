#include "convert/to_capture.h"

#include <fmt/core.h>

#include <vector>

#include "config/settings.h"
#include "recording/recorder.h"
#include "wire/decode.h"
#include "wire/encode.h"

namespace kedge::convert {

namespace {

constexpr SourceId link_source = 1;
constexpr std::uint16_t first_sender_port = 47900;
constexpr TimeNs looks_like_utc_ns = 1'000'000'000 * ns_per_s;
constexpr TimeNs device_lead_ns = 1000 * ns_per_s;

/// UTC minus the time of the logs.
TimeNs utc_offset(TimeNs first_ns) { return first_ns >= looks_like_utc_ns ? 0 : recording::utc_begin_ns - first_ns; }

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

capture::UdpPath path_of(std::uint32_t tag, const config::v1::Configuration& configuration) {
  const std::array<std::uint8_t, 16> loopback = {127, 0, 0, 1};
  return {capture::Family::v4,
          {loopback, static_cast<std::uint16_t>(first_sender_port + tag)},
          {loopback, static_cast<std::uint16_t>(configuration.links(0).udp().port())}};
}

/// The first multiple of the step at or after that time, which is not negative.
TimeNs next_multiple(TimeNs time_ns, TimeNs step_ns) { return (time_ns + step_ns - 1) / step_ns * step_ns; }

}  // namespace

Result<ToCapture> write_capture(const LogFolder& folder, const config::v1::Configuration& configuration,
                                const std::string& path) {
  const pipeline::Settings settings = config::settings_from(configuration);
  const TimeNs first_ns = folder.events().front().time_ns;
  auto recorder = recording::Recorder::create(path, configuration,
                                              {.program = "kedge-convert",
                                               .time_ns = first_ns,
                                               .utc_minus_monotonic_ns = utc_offset(first_ns),
                                               .links = {link_source}});
  if (!recorder) return Error{recorder.error()};

  ToCapture done;
  Door door(settings.site.propagation_speed_mps);
  TimeNs tick_ns = next_multiple(first_ns, settings.limits.tick_ns);
  std::vector<std::uint32_t> sequences(folder.tags().size());
  packets::v1::Datagram datagram;
  for (const LogEvent& event : folder.events()) {
    for (; tick_ns <= event.time_ns; tick_ns += settings.limits.tick_ns) {
      if (Status status = recorder->tick(tick_ns); !status) return Error{status.error()};
    }
    datagram.Clear();
    packets::v1::Packet& packet = *datagram.add_packets();
    packet = folder.packet(event);
    packet.set_device_id(folder.tags()[event.tag].device_id);
    packet.set_sequence(sequences[event.tag]++);
    const TimeNs device_ns = event.time_ns + device_lead_ns;
    packet.set_device_time_us(static_cast<std::uint64_t>((device_ns + ns_per_us / 2) / ns_per_us));
    const std::vector<std::byte> bytes = wire::encode(datagram);
    ++done.packets;
    if (const std::string& objection = door.objection(bytes); !objection.empty() && done.refused++ == 0) {
      done.first_refusal = folder.place(event) + ": " + objection;
    }
    const capture::UdpPath way = path_of(event.tag, configuration);
    if (Status status = recorder->input(event.time_ns, link_source, bytes, way); !status) return Error{status.error()};
  }
  // One more, so that what came last is published.
  if (Status status = recorder->tick(tick_ns); !status) return Error{status.error()};
  if (Status status = recorder->close(); !status) return Error{status.error()};
  return done;
}

}  // namespace kedge::convert
