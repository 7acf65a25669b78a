// Writes down where the simulated tags really are, at even steps of station time.
#pragma once

#include <fstream>
#include <string>
#include <vector>

#include "core/result.h"
#include "core/time.h"
#include "simulation/scenario.h"
#include "simulation/vehicle.h"

namespace kedge::simulate {

class TruthWriter {
 public:
  explicit TruthWriter(const std::vector<simulation::ScenarioSpec>& specs);

  /// Makes the file; an existing one is refused. An empty path: nothing is written.
  [[nodiscard]] Status open(const std::string& path);
  /// Writes all rows up to that time.
  void advance(TimeNs now_ns);
  [[nodiscard]] Status close();

 private:
  void write_rows(TimeNs time_ns);

  std::string path_;
  std::ofstream out_;
  std::vector<std::string> names_;
  std::vector<simulation::Vehicle> vehicles_;
  TimeNs next_ns_;
  TimeNs end_ns_;
};

}  // namespace kedge::simulate
