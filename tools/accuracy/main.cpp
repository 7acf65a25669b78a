// kedge-accuracy: what each method reaches on the simulated scenarios, over many seeded runs from a known
// start. It prints the comparison table of the README.
#include <fmt/core.h>
#include <fmt/ranges.h>
#include <CLI/CLI.hpp>

#include <algorithm>
#include <atomic>
#include <cstdio>
#include <map>
#include <string>
#include <thread>
#include <vector>

#include "accuracy/run.h"
#include "accuracy/summary.h"
#include "core/build_info.h"

namespace {

using kedge::accuracy::Summary;
using kedge::fusion::Method;
using kedge::scoring::Figures;
using kedge::simulation::Scenario;
using kedge::simulation::ScenarioSpec;

constexpr int exit_usage = 2;

const std::map<std::string, Method> methods = {
    {"plain", Method::plain}, {"speed_aided", Method::speed_aided}, {"standard", Method::mixture}};

struct Options {
  std::vector<std::string> scenarios = {"triangle", "rows", "stop-and-go"};
  std::vector<std::string> methods = {"plain", "speed_aided"};
  std::uint64_t runs = 50;
  std::uint64_t seed = 1;
  double duration_s = 0.0;
  bool mild = false;
  unsigned jobs = std::max(1U, std::thread::hardware_concurrency());
};

ScenarioSpec spec_of_run(const Options& options, Scenario scenario, std::uint64_t run) {
  const std::uint64_t seed = options.seed + run;
  ScenarioSpec spec = kedge::simulation::spec_of(scenario, seed);
  spec.placement = kedge::simulation::varied_placement(scenario, seed);
  if (options.duration_s > 0.0) spec.duration_s = options.duration_s;
  if (options.mild) {
    spec.faults.terrain_tilt_rad = 0.0;
    spec.faults.slip_rad = 0.0;
    spec.faults.range_bias_max_m = 0.0;
    spec.faults.obstructed_share = 0.0;
  }
  return spec;
}

/// Runs are independent, so the result does not hang on who takes which.
std::vector<Figures> score_runs(const Options& options, Scenario scenario, Method method) {
  std::vector<Figures> figures(options.runs);
  std::atomic<std::uint64_t> next = 0;
  const auto work = [&] {
    for (std::uint64_t run = next++; run < options.runs; run = next++) {
      figures[run] = kedge::accuracy::score_run(spec_of_run(options, scenario, run), method);
    }
  };
  std::vector<std::jthread> workers;
  for (unsigned i = 1; i < options.jobs; ++i) workers.emplace_back(work);
  work();
  workers.clear();
  return figures;
}

void measure(const Options& options) {
  fmt::print("Second half of each run, known start (0.5 m, 5 degrees), seeds {} to {}{}.\n\n", options.seed,
             options.seed + options.runs - 1,
             options.mild ? ", level ground, no slip, no range bias, no obstruction" : "");
  fmt::print("{}", kedge::accuracy::table_head());
  std::string ratios;
  for (const std::string& name : options.scenarios) {
    std::map<Method, Summary> summaries;
    for (const std::string& method : options.methods) {
      const Scenario scenario = *kedge::simulation::scenario_named(name);
      const Summary summary = kedge::accuracy::summarise(score_runs(options, scenario, methods.at(method)));
      summaries[methods.at(method)] = summary;
      fmt::print("{}", kedge::accuracy::table_row(name, method, summary));
      std::fflush(stdout);
    }
    if (summaries.size() < 2) continue;
    const Summary& plain = summaries[Method::plain];
    const Summary& aided = summaries[Method::speed_aided];
    ratios += fmt::format("{}: plain over speed_aided: {:.1f} (median run), {:.1f} (all runs)\n", name,
                          plain.position_rms_median_m / aided.position_rms_median_m,
                          plain.position_rms_all_m / aided.position_rms_all_m);
  }
  fmt::print("\n{}", ratios);
}

int run(int argc, char** argv) {
  CLI::App app("kedge-accuracy measures the methods on the simulated scenarios.");
  app.set_version_flag("--version", std::string(kedge::version()));
  Options options;
  std::vector<std::string> names;
  for (const Scenario scenario : kedge::simulation::scenarios) names.emplace_back(kedge::simulation::name_of(scenario));
  app.add_option("--scenario", options.scenarios, fmt::format("Of {}; may be repeated", fmt::join(names, ", ")))
      ->check(CLI::IsMember(names))
      ->capture_default_str();
  app.add_option("--method", options.methods, "plain, speed_aided or standard; may be repeated")
      ->check(CLI::IsMember(methods))
      ->capture_default_str();
  app.add_option("--runs", options.runs, "Runs of each")->check(CLI::Range(1, 100000))->capture_default_str();
  app.add_option("--seed", options.seed, "Of the first run")->capture_default_str();
  app.add_option("--seconds", options.duration_s, "Length of a run; absent: that of the scenario")
      ->check(CLI::Range(10.0, 3600.0));
  app.add_flag("--mild", options.mild, "Level ground, no slip, no range bias, no obstruction");
  app.add_option("--jobs", options.jobs, "Runs at a time")->check(CLI::Range(1, 256))->capture_default_str();
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  measure(options);
  return 0;
}

}  // namespace

int main(int argc, char** argv) {
  try {
    return run(argc, argv);
  } catch (const std::exception& failure) {
    std::fputs("kedge-accuracy: ", stderr);
    std::fputs(failure.what(), stderr);
    std::fputs("\n", stderr);
    return 1;
  }
}
