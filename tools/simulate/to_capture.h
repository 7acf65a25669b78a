// The same run as a capture, as if a station had recorded it.
#pragma once

#include "core/result.h"
#include "simulate/plan.h"

namespace kedge::simulate {

/// Writes options.capture (which must not exist yet) with the plan's configuration in it, so that it
/// replays by itself, and the truth where asked for.
[[nodiscard]] Status write_capture(const Options& options, const Plan& plan);

}  // namespace kedge::simulate
