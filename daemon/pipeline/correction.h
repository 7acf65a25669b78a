// What an operator may say about a tag. The rules stand here, not at the socket the words come in by: a
// record in a capture is held to them as well.
#pragma once

#include "core/result.h"
#include "proto/station.pb.h"

namespace kedge::pipeline {

/// What coordinates, their scatter, and headings may be; the configuration is held to the same.
struct Bounds {
  double low = 0.0;
  double high = 0.0;  ///< included, like low
};
inline constexpr Bounds level_bounds_m = {-100e3, 100e3};  ///< beyond, a flat site is no model of the ground
inline constexpr Bounds up_bounds_m = {-10e3, 10e3};
inline constexpr Bounds position_sigma_bounds_m = {0.001, 10e3};
inline constexpr Bounds heading_bounds_deg = {-360.0, 360.0};
inline constexpr Bounds heading_sigma_bounds_deg = {0.01, 180.0};

/// Fails with the field, and the range and unit that would be right. Whether the tag exists is not looked at.
[[nodiscard]] Status check_correction(const station::v1::Correction& correction);

}  // namespace kedge::pipeline
