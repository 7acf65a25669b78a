#include "simulate/to_capture.h"

#include <arpa/inet.h>
#include <fmt/core.h>

#include <algorithm>

#include "config/settings.h"
#include "recording/recorder.h"
#include "simulate/truth_writer.h"
#include "simulation/packets.h"
#include "wire/encode.h"

namespace kedge::simulate {

namespace {

constexpr std::uint16_t first_sender_port = 47900;

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

Status write_records(const Plan& plan, const Routes& routes, TimeNs tick_ns, recording::Recorder& recorder) {
  TimeNs next_tick_ns = plan.specs.front().start_ns + tick_ns;
  simulation::Fleet fleet(plan.specs);
  while (const auto arrival = fleet.next()) {
    for (; next_tick_ns <= arrival->time_ns; next_tick_ns += tick_ns) {
      if (Status written = recorder.tick(next_tick_ns); !written) return written;
    }
    Status written;
    if (plan.serial_tag == arrival->tag) {
      written = recorder.input(arrival->time_ns, routes.serial, wire::frame(arrival->bytes), {});
    } else {
      capture::UdpPath path = routes.path;
      path.from.port = static_cast<std::uint16_t>(first_sender_port + arrival->tag);
      written = recorder.input(arrival->time_ns, routes.udp, arrival->bytes, path);
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

  recording::Opening opening = {.program = "kedge-simulate",
                                .time_ns = start_ns,
                                .utc_minus_monotonic_ns = recording::utc_begin_ns - start_ns,
                                .synchronised = true,
                                .links = {}};
  for (const SourceId source : {routes.udp, routes.serial}) {
    if (source != 0) opening.links.push_back(source);
  }
  TruthWriter truth(plan.specs);
  if (Status opened = truth.open(options.truth); !opened) return opened;
  auto recorder = recording::Recorder::create(options.capture, plan.configuration, opening);
  if (!recorder) return Error{recorder.error()};
  if (Status written = write_records(plan, routes, settings.limits.tick_ns, *recorder); !written) return written;
  if (Status closed = recorder->close(); !closed) return closed;
  truth.advance(start_ns + from_seconds(plan.specs.front().duration_s));
  return truth.close();
}

}  // namespace kedge::simulate
