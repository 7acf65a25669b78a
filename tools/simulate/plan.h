// What a run of the simulator consists of: the tags, how they move, and a configuration of the station
// that matches them.
#pragma once

#include <cstddef>
#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"
#include "proto/config.pb.h"
#include "simulation/scenario.h"

namespace kedge::simulate {

struct Options {
  std::string scenario;  ///< empty with a site: each tag gets one that suits it
  std::string site;      ///< configuration whose tags are simulated; empty: one tag on the default site
  std::uint64_t seed = 1;
  std::optional<double> duration_s;
  bool unknown_start = false;
  bool ideal = false;
  std::string ranging = "distance";
  std::optional<double> loss;
  std::optional<double> duplicates;
  std::optional<double> reorder;
  std::optional<double> jitter_ms;
  std::optional<double> obstructed;
  std::optional<double> restart_after_s;
  std::optional<double> wrap_after_s;

  std::string udp;  ///< host:port
  std::string serial;
  std::string pty;
  std::string serial_tag;
  std::string capture;
  std::string truth;
  std::string config_out;

  [[nodiscard]] bool live() const { return capture.empty(); }
  [[nodiscard]] bool has_serial() const { return !serial.empty() || !pty.empty(); }
};

struct Plan {
  std::vector<simulation::ScenarioSpec> specs;
  config::v1::Configuration configuration;
  std::optional<std::size_t> serial_tag;  ///< index of the tag on the serial line
};

/// Fails, with every reason on a line of its own, when the options do not make a run.
[[nodiscard]] Result<Plan> make_plan(const Options& options);

/// Moves the whole run to begin at that station time.
void begin_at(Plan& plan, TimeNs start_ns);

}  // namespace kedge::simulate
