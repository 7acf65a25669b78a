#include "accuracy/summary.h"

#include <fmt/core.h>

#include <cmath>

#include "core/assert.h"

namespace kedge::accuracy {

Summary summarise(const std::vector<scoring::Figures>& runs) {
  KEDGE_ASSERT(!runs.empty());
  Summary summary;
  summary.runs = runs.size();
  std::vector<double> rms_m;
  std::vector<double> speed_rms_mps;
  std::vector<double> settled_after_s;
  double squares_m2 = 0.0;
  double inside = 0.0;
  double nees = 0.0;
  double positions = 0.0;
  double samples = 0.0;
  double wrong = 0.0;
  for (const scoring::Figures& run : runs) {
    const auto weight = static_cast<double>(run.positions);
    samples += static_cast<double>(run.samples);
    wrong += static_cast<double>(run.confidently_wrong_samples);
    summary.wrong_runs += run.confidently_wrong > 0.5 ? 1 : 0;
    if (run.settled_after_s) settled_after_s.push_back(*run.settled_after_s);
    if (run.speed_rms_mps) speed_rms_mps.push_back(*run.speed_rms_mps);
    if (run.positions == 0) continue;
    rms_m.push_back(run.position_rms_m);
    squares_m2 += weight * run.position_rms_m * run.position_rms_m;
    inside += weight * run.inside_95;
    nees += weight * run.nees;
    positions += weight;
  }
  summary.never_settled = runs.size() - settled_after_s.size();
  if (!settled_after_s.empty()) summary.settled_after_median_s = scoring::quantile(settled_after_s, 0.5);
  if (!speed_rms_mps.empty()) summary.speed_rms_median_mps = scoring::quantile(speed_rms_mps, 0.5);
  if (positions > 0.0) {
    summary.position_rms_median_m = scoring::quantile(rms_m, 0.5);
    summary.position_rms_all_m = std::sqrt(squares_m2 / positions);
    summary.inside_95 = inside / positions;
    summary.nees = nees / positions;
  }
  if (samples > 0.0) summary.confidently_wrong = wrong / samples;
  summary.confidently_wrong_95 = scoring::wilson_95(summary.confidently_wrong, static_cast<double>(runs.size()));
  return summary;
}

std::string table_head() {
  return "| scenario | method | runs | RMS m, median run | RMS m, all runs | speed RMS m/s | inside 95 % | NEES (2) | "
         "settled after s (never) | confidently wrong (95 % interval) | wrong runs |\n"
         "|---|---|---|---|---|---|---|---|---|---|---|\n";
}

std::string table_row(const std::string& scenario, const std::string& method, const Summary& s) {
  const std::string settled = s.settled_after_median_s ? fmt::format("{:.1f}", *s.settled_after_median_s) : "-";
  return fmt::format(
      "| {} | {} | {} | {:.2f} | {:.2f} | {:.3f} | {:.2f} | {:.1f} | {} ({}) | {:.4f} ({:.4f} to {:.4f}) | {} |\n",
      scenario, method, s.runs, s.position_rms_median_m, s.position_rms_all_m, s.speed_rms_median_mps, s.inside_95,
      s.nees, settled, s.never_settled, s.confidently_wrong, s.confidently_wrong_95.low, s.confidently_wrong_95.high,
      s.wrong_runs);
}

}  // namespace kedge::accuracy
