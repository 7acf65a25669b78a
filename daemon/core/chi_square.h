// Gates and ellipses rest on chi-square quantiles; the few that are used stand here.
// Source: NIST/SEMATECH e-Handbook of Statistical Methods, chi-square table; more digits by inversion
// of the regularised gamma function. tests/outside compares them with the published table.
#pragma once

#include <array>

namespace kedge {

/// Quantiles for 1, 2 and 3 degrees of freedom: index with dof - 1.
inline constexpr std::array<double, 3> chi_square_95 = {3.841459, 5.991465, 7.814728};
inline constexpr std::array<double, 3> chi_square_99 = {6.634897, 9.210340, 11.344867};
inline constexpr std::array<double, 3> chi_square_999 = {10.827566, 13.815511, 16.266236};

/// 95 % radius of a circular two-dimensional Gaussian with unit sigma (Rayleigh): sqrt(chi_square_95[1]).
inline constexpr double circular_95 = 2.447747;

}  // namespace kedge
