// kedged: arguments, configuration, runtime, exit code.
//
// Exit codes: 0 ended on request, 1 could not run or lost something, 2 usage or configuration.
#include <fmt/core.h>
#include <spdlog/sinks/stdout_color_sinks.h>
#include <spdlog/spdlog.h>
#include <CLI/CLI.hpp>

#include <filesystem>

#include "app/live_runtime.h"
#include "config/load.h"
#include "config/print.h"
#include "core/build_info.h"
#include "feed/greeting.h"

namespace {

constexpr int exit_failure = 1;
constexpr int exit_usage = 2;

int run(const kedge::config::v1::Configuration& configuration, const std::string& stream_path) {
  kedge::app::LiveRuntime runtime(configuration, stream_path);
  if (const kedge::Status opened = runtime.open(); !opened) {
    spdlog::error("{}", opened.error());
    return exit_failure;
  }
  if (const kedge::Status ended = runtime.run(); !ended) {
    spdlog::error("{}", ended.error());
    return exit_failure;
  }
  return 0;
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app("kedged locates the tags of one site from ranges and inertial data and publishes where they are.\n\n" +
               std::string(kedge::feed::caution()));
  app.set_version_flag("--version", std::string(kedge::version()));
  std::string path;
  std::string stream_path;
  std::string level = "info";
  bool check = false;
  bool print = false;
  app.add_option("CONFIGURATION", path, "Configuration file (.txtpb)")->required();
  auto* check_flag = app.add_flag("--check", check, "Only say whether the configuration is good");
  app.add_flag("--print", print, "Only print the effective configuration")->excludes(check_flag);
  app.add_option("--stream", stream_path, "Also write the canonical stream to this file, as JSON lines");
  app.add_option("--log-level", level, "Least level that is logged")
      ->check(CLI::IsMember({"debug", "info", "warn", "error"}))
      ->capture_default_str();
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }

  const kedge::config::Loaded loaded = kedge::config::load(path);
  for (const std::string& error : loaded.errors) fmt::print(stderr, "{}\n", error);
  if (!loaded.merged) return exit_usage;
  if (check) {
    fmt::print("{}: good\n", path);
    return 0;
  }
  if (print) {
    fmt::print("{}", kedge::config::print(*loaded.merged));
    return 0;
  }

  std::error_code absent;
  if (!stream_path.empty() && std::filesystem::equivalent(path, stream_path, absent)) {
    fmt::print(stderr, "--stream {} is the configuration itself; name another file\n", stream_path);
    return exit_usage;
  }
  spdlog::set_default_logger(spdlog::stderr_color_st("kedged"));
  spdlog::set_pattern("%Y-%m-%dT%H:%M:%S.%eZ %^%l%$ %v", spdlog::pattern_time_type::utc);
  spdlog::set_level(spdlog::level::from_str(level));
  try {
    return run(*loaded.merged, stream_path);
  } catch (const std::exception& failure) {
    spdlog::critical("{}", failure.what());
    return exit_failure;
  }
}
