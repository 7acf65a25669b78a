// kedge-simulate: seeded tags with the faults of real ones, to a station or into a capture.
#include <fmt/core.h>
#include <CLI/CLI.hpp>

#include <cstdio>
#include <exception>

#include "config/print.h"
#include "core/build_info.h"
#include "recording/new_file.h"
#include "simulate/live.h"
#include "simulate/plan.h"
#include "simulate/to_capture.h"

namespace {

using kedge::simulate::Options;
using kedge::simulate::Plan;

constexpr int exit_failure = 1;
constexpr int exit_usage = 2;

int fail(int code, const std::string& text) {
  fmt::print(stderr, "kedge-simulate: {}\n", text);
  return code;
}

void add_options(CLI::App& app, Options& options) {
  app.add_option("SCENARIO", options.scenario, "straight, triangle, rows, stop-and-go or flight");
  app.add_option("--site", options.site, "Simulate the tags of this configuration, from where it says they start");
  app.add_option("--seed", options.seed, "Everything random comes from it")->capture_default_str();
  app.add_option("--seconds", options.duration_s, "Length of the run; absent: that of the scenario, live without end")
      ->check(CLI::Range(1.0, 86400.0));
  app.add_flag("--unknown-start", options.unknown_start, "Leave the start out of the configuration written");

  auto* udp = app.add_option("--udp", options.udp, "Send live to this HOST:PORT");
  auto* serial = app.add_option("--serial", options.serial, "Send live over this serial device");
  auto* pty = app.add_option("--pty", options.pty, "Make a pseudo-terminal with this name and send over it");
  serial->excludes(pty);
  app.add_option("--serial-tag", options.serial_tag, "The tag on the serial line, where there are several");
  auto* capture = app.add_option("--capture", options.capture, "Write this capture instead of sending (.pcapng)");
  capture->excludes(udp);
  app.add_option("--truth", options.truth, "Write where the tags really are (.csv); never overwritten");
  app.add_option("--config-out", options.config_out, "Write a configuration to match (.txtpb); never overwritten");

  const CLI::Range share(0.0, 1.0);
  app.add_flag("--ideal", options.ideal, "No faults but those asked for");
  app.add_option("--ranging", options.ranging, "distance, single-sided, double-sided or second-reply")
      ->capture_default_str();
  app.add_option("--loss", options.loss, "Share of datagrams lost")->check(share);
  app.add_option("--duplicates", options.duplicates, "Share of datagrams that come twice")->check(share);
  app.add_option("--reorder", options.reorder, "Share of datagrams overtaken by later ones")->check(share);
  app.add_option("--jitter-ms", options.jitter_ms, "Mean of the random delay")->check(CLI::Range(0.0, 1000.0));
  app.add_option("--obstructed", options.obstructed, "Share of ranges that are too long")->check(CLI::Range(0.0, 0.9));
  app.add_option("--restart-after", options.restart_after_s, "Devices start anew after so many seconds")
      ->check(CLI::PositiveNumber);
  app.add_option("--wrap-after", options.wrap_after_s, "32-bit device clocks wrap after so many seconds")
      ->check(CLI::Range(0.0, 4294.0));
}

kedge::Status write_configuration(const Options& options, const Plan& plan) {
  if (options.config_out.empty()) return {};
  return kedge::recording::write_new(options.config_out, kedge::config::print(plan.configuration));
}

kedge::Status run(const Options& options, Plan& plan) {
  if (kedge::Status fresh = kedge::recording::check_new(options.config_out); !fresh) return fresh;
  if (!options.live()) {
    if (kedge::Status written = kedge::simulate::write_capture(options, plan); !written) return written;
    return write_configuration(options, plan);
  }
  // The station that is to hear the tags needs it while they send.
  if (kedge::Status written = write_configuration(options, plan); !written) return written;
  return kedge::simulate::run_live(options, plan);
}

int simulate(const Options& options) {
  auto plan = kedge::simulate::make_plan(options);
  if (!plan) return fail(exit_usage, plan.error());
  const kedge::Status done = run(options, *plan);
  return done ? 0 : fail(exit_failure, done.error());
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app("kedge-simulate plays tags with the faults of real ones: live to a station, or into a capture.");
  app.set_version_flag("--version", std::string(kedge::version()));
  Options options;
  add_options(app, options);
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  try {
    return simulate(options);
  } catch (const std::exception& failure) {
    return fail(exit_failure, failure.what());
  }
}
