// One simulated run through the engine, scored.
#pragma once

#include "fusion/site.h"
#include "scoring/figures.h"
#include "simulation/scenario.h"

namespace kedge::accuracy {

/// Packets of the tag through the engine, from a known start; figures of the second half.
[[nodiscard]] scoring::Figures score_run(const simulation::ScenarioSpec& spec, fusion::Method method);

}  // namespace kedge::accuracy
