#include "simulate/live.h"

#include <fmt/core.h>

#include <cerrno>
#include <csignal>
#include <ctime>

#include "io/monotonic.h"
#include "simulate/serial_line.h"
#include "simulate/truth_writer.h"
#include "simulate/udp_sender.h"
#include "simulation/packets.h"
#include "wire/encode.h"

namespace kedge::simulate {

namespace {

// Time to make ready between now and the first sample.
constexpr TimeNs head_start_ns = 200 * ns_per_ms;

volatile std::sig_atomic_t stopped = 0;
extern "C" void stop(int) { stopped = 1; }

void install_stop() {
  struct sigaction action = {};
  action.sa_handler = stop;  // without SA_RESTART: a signal ends the wait
  sigaction(SIGINT, &action, nullptr);
  sigaction(SIGTERM, &action, nullptr);
}

void wait_until(TimeNs time_ns) {
  const timespec at{.tv_sec = time_ns / ns_per_s, .tv_nsec = time_ns % ns_per_s};
  while (stopped == 0 && clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, &at, nullptr) == EINTR) {
  }
}

}  // namespace

Status run_live(const Options& options, Plan& plan) {
  begin_at(plan, io::now_monotonic() + head_start_ns);
  UdpSender udp;
  SerialLine serial;
  if (!options.udp.empty()) {
    if (Status opened = udp.open(options.udp, plan.specs.size()); !opened) return opened;
  }
  if (plan.serial_tag) {
    Status opened = options.pty.empty() ? serial.open(options.serial) : serial.make_pty(options.pty);
    if (!opened) return opened;
  }
  TruthWriter truth(plan.specs);
  if (Status opened = truth.open(options.truth); !opened) return opened;

  install_stop();
  simulation::Fleet fleet(plan.specs);
  std::uint64_t sent = 0;
  while (stopped == 0) {
    const auto arrival = fleet.next();
    if (!arrival) break;
    wait_until(arrival->time_ns);
    if (stopped != 0) break;
    if (plan.serial_tag == arrival->tag) {
      serial.send(wire::frame(arrival->bytes));
    } else {
      udp.send(arrival->tag, arrival->bytes);
    }
    ++sent;
    truth.advance(arrival->time_ns);
  }
  fmt::print(stderr, "{} datagrams of {} tags sent, {} of them refused by the system or the line\n", sent,
             plan.specs.size(), udp.refused() + serial.refused());
  return truth.close();
}

}  // namespace kedge::simulate
