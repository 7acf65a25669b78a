// What a tag that has just woken is told of itself: the configured start, outranked by an operator's word that was
// said while it was still waking.
#pragma once

#include <optional>

#include "fusion/measurement.h"
#include "fusion/site.h"

namespace kedge::fusion {

struct Opening {
  std::optional<Vector2> position_m;
  double position_sigma_m = 0.0;
  std::optional<double> heading_rad;
  double heading_sigma_rad = 0.0;
};

[[nodiscard]] inline Opening opening_of(const std::optional<Start>& start,
                                        const std::optional<CorrectionMeasurement>& word) {
  Opening opening;
  if (start) {
    opening = {start->position_m, start->position_sigma_m, start->heading_rad, start->heading_sigma_rad};
  }
  if (word && word->position_m) {
    // Where it points is not where the configuration had it when it stands somewhere else.
    opening = {*word->position_m, word->position_sigma_m, std::nullopt, 0.0};
  }
  if (word && word->heading_rad) {
    opening.heading_rad = word->heading_rad;
    opening.heading_sigma_rad = word->heading_sigma_rad;
  }
  return opening;
}

}  // namespace kedge::fusion
