// The station's configuration for one simulated tag on the default site.
#pragma once

#include "proto/config.pb.h"
#include "simulate/plan.h"

namespace kedge::simulate {

/// Address and port of the link where none is given.
inline constexpr const char* udp_default = "127.0.0.1:47800";

/// Checked as one that was loaded.
[[nodiscard]] Result<config::v1::Configuration> configuration_for(const Options& options,
                                                                  const simulation::ScenarioSpec& spec);

}  // namespace kedge::simulate
