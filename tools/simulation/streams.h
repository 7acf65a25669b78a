// The numbers of the random streams, one for each thing that is drawn (simulation/random.h).
#pragma once

#include <cstdint>

namespace kedge::simulation::streams {

inline constexpr std::uint64_t placement = 1;
inline constexpr std::uint64_t start = 2;
inline constexpr std::uint64_t ground_slope = 3;
inline constexpr std::uint64_t ground_roll = 4;
inline constexpr std::uint64_t slip = 5;
inline constexpr std::uint64_t yaw = 6;
inline constexpr std::uint64_t gyro = 7;
inline constexpr std::uint64_t accel = 8;
inline constexpr std::uint64_t vibration = 9;
inline constexpr std::uint64_t field = 10;
inline constexpr std::uint64_t pressure = 11;
inline constexpr std::uint64_t range_noise = 12;
inline constexpr std::uint64_t range_loss = 13;
inline constexpr std::uint64_t range_bias = 14;
inline constexpr std::uint64_t obstruction = 15;
inline constexpr std::uint64_t counters = 16;
inline constexpr std::uint64_t clock = 17;
inline constexpr std::uint64_t link = 18;

}  // namespace kedge::simulation::streams
