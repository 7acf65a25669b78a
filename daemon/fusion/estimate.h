// What an estimator says about one tag, with how sure it is.
#pragma once

#include <cstdint>
#include <optional>

#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

/// One solution: where, how fast, how sure. Site axes.
struct Mode {
  Vector3 position_m = Vector3::Zero();
  Matrix3 position_covariance_m2 = Matrix3::Zero();
  Vector3 velocity_mps = Vector3::Zero();
  Matrix3 velocity_covariance_m2ps2 = Matrix3::Zero();
  double probability = 1.0;
};

/// How far the solution has come; the pipeline makes the published standing of it.
enum class Phase : std::uint8_t {
  waking,   ///< levelling, no attitude yet
  ring,     ///< attitude, perhaps a range; no direction
  twofold,  ///< `lead` and `mirror` are both possible
  single,   ///< `lead` alone
};

struct Estimate {
  TimeNs time_ns = 0;  ///< all below holds for this instant
  Phase phase = Phase::waking;
  Mode lead;    ///< valid in twofold and single
  Mode mirror;  ///< valid in twofold

  std::optional<double> ring_radius_m;  ///< level distance from ring_anchor, in phase ring
  std::uint32_t ring_anchor = 0;

  std::optional<double> heading_rad;  ///< of the body x axis, site east counter-clockwise
  double heading_sigma_rad = 0.0;
  bool at_rest = false;

  /// Speed from the shape of the ranges over a window alone, independent of the filter.
  std::optional<double> check_speed_mps;
  double check_speed_sigma_mps = 0.0;

  /// Smoothed figures for the health checks; each is explained in MATHEMATICS.md.
  double range_excess_m = 0.0;          ///< running mean of range innovations, refused ones included
  double range_gated_share = 0.0;       ///< running share of refused ranges, 0 to 1
  double field_error_share = 0.0;       ///< running |field strength error| over strength, 0 to 1
  double heading_innovation_rad = 0.0;  ///< running mean of magnetic minus predicted heading
};

}  // namespace kedge::fusion
