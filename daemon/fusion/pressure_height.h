// Height from air pressure, for tags that leave the ground.
//
// ISO 2533 standard atmosphere, first layer: T(h) = 288.15 K - 0.0065 K/m h. Only differences to the
// pressure at the start are used, so the weather's own offset falls out (MATHEMATICS.md, eq. 34).
#pragma once

#include <cmath>

namespace kedge::fusion {

/// Geopotential height in m above the 101325 Pa level; pressure_pa > 0.
inline double standard_height_m(double pressure_pa) {
  constexpr double temperature_k = 288.15;
  constexpr double lapse_k_per_m = 0.0065;
  constexpr double gravity_mps2 = 9.80665;
  constexpr double gas_constant_j_per_kg_k = 287.05287;
  const double exponent = gas_constant_j_per_kg_k * lapse_k_per_m / gravity_mps2;
  return temperature_k / lapse_k_per_m * (1.0 - std::pow(pressure_pa / 101325.0, exponent));
}

}  // namespace kedge::fusion
