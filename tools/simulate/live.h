// Sends what the simulated tags send, at the moments they send it.
#pragma once

#include "core/result.h"
#include "simulate/plan.h"

namespace kedge::simulate {

/// Runs until the plan's end, SIGINT or SIGTERM. The plan begins now.
[[nodiscard]] Status run_live(const Options& options, Plan& plan);

}  // namespace kedge::simulate
