// What the command line asks for.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

namespace kedge::convert {

struct Options {
  std::string from;
  std::string to;

  // Of a folder of logs alone.
  std::string config_out;
  std::string profile = "wheeled";
  std::string method = "standard";
  std::vector<std::uint32_t> anchors;  ///< empty: all
  std::vector<std::string> tags;       ///< empty: all
  double mounting_roll_deg = 0.0;
  double mounting_pitch_deg = 0.0;
  double mounting_yaw_deg = 0.0;
  std::vector<double> antenna_m;  ///< forward, left, up of the inertial unit; or none
  std::optional<double> height_m;
  std::vector<double> start;  ///< east, north, sigma in m, and bearing, its sigma in degrees; or none
  std::optional<double> range_lag_s;
  std::optional<double> range_sigma_m;
};

}  // namespace kedge::convert
