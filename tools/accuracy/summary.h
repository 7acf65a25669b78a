// Many runs of one scenario and one method, in one line.
#pragma once

#include <cstddef>
#include <optional>
#include <string>
#include <vector>

#include "scoring/figures.h"

namespace kedge::accuracy {

struct Summary {
  std::size_t runs = 0;
  double position_rms_median_m = 0.0;  ///< of the runs' root mean squares
  double position_rms_all_m = 0.0;     ///< over all runs together
  double speed_rms_median_mps = 0.0;
  double inside_95 = 0.0;  ///< of all samples
  double nees = 0.0;       ///< of all samples
  std::optional<double> settled_after_median_s;
  std::size_t never_settled = 0;   ///< runs
  double confidently_wrong = 0.0;  ///< share of all time
  /// As if each run were one trial: neighbouring samples are no independent ones.
  scoring::Interval confidently_wrong_95;
  std::size_t wrong_runs = 0;  ///< confidently wrong for more than half of the time
};

/// Precondition: runs is not empty. A run without any position counts as never settled and is left out of
/// the position figures.
[[nodiscard]] Summary summarise(const std::vector<scoring::Figures>& runs);

[[nodiscard]] std::string table_head();
[[nodiscard]] std::string table_row(const std::string& scenario, const std::string& method, const Summary& summary);

}  // namespace kedge::accuracy
