// How firmly a tag is located: one word, made of the estimate and the age of what it rests on.
#pragma once

#include <optional>

#include "fusion/estimate.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"

namespace kedge::pipeline {

/// What the standing of a tag rests on, at one tick.
struct Footing {
  bool heard = false;  ///< a packet within limits.silent_ns
  fusion::Phase phase = fusion::Phase::waking;
  std::optional<double> radius_95_m;
  bool ranges_fresh = false;  ///< a usable range within limits.range_stale_ns
};

/// The standing that follows `now`; hysteresis between settled_enter_m and settled_leave_m.
[[nodiscard]] inline Standing standing_after(Standing before, const Footing& now, const Limits& limits) {
  if (!now.heard) return Standing::silent;
  switch (now.phase) {
    case fusion::Phase::waking:
      return Standing::waking;
    case fusion::Phase::ring:
      return Standing::ring;
    case fusion::Phase::twofold:
      return Standing::twofold;
    case fusion::Phase::single:
      break;
  }
  const double radius_m = now.radius_95_m.value_or(limits.lost_radius_m);
  if (radius_m >= limits.lost_radius_m) return Standing::lost;
  if (!now.ranges_fresh) return Standing::coasting;
  const double limit_m = before == Standing::settled ? limits.settled_leave_m : limits.settled_enter_m;
  return radius_m <= limit_m ? Standing::settled : Standing::loose;
}

/// Whether a position is published in this standing.
[[nodiscard]] inline bool has_position(Standing standing) {
  return standing != Standing::silent && standing != Standing::waking && standing != Standing::ring;
}

}  // namespace kedge::pipeline
