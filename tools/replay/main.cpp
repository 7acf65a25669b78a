// kedge-replay: a capture through the same engine, the same messages out.
#include <fmt/core.h>
#include <CLI/CLI.hpp>

#include <chrono>
#include <cstdio>
#include <filesystem>
#include <string>
#include <thread>

#include "app/message_file.h"
#include "app/processor.h"
#include "app/replay_runtime.h"
#include "capture/capture_reader.h"
#include "capture/file_source.h"
#include "config/load.h"
#include "core/build_info.h"

namespace {

using kedge::TimeNs;

constexpr int exit_failure = 1;
constexpr int exit_usage = 2;

struct Options {
  std::string capture;
  std::string config;
  std::string out = "-";
  double speed = 0.0;
};

int fail(int code, const std::string& text) {
  fmt::print(stderr, "kedge-replay: {}\n", text);
  return code;
}

/// Waits so that records follow each other `speed` times as fast as they came.
kedge::app::Pace pace_at(double speed) {
  if (speed <= 0.0) return {};
  using Clock = std::chrono::steady_clock;
  return [speed, begun = Clock::now(), first_ns = std::optional<TimeNs>()](TimeNs time_ns) mutable {
    if (!first_ns) first_ns = time_ns;
    const double after_s = kedge::seconds(time_ns - *first_ns) / speed;
    std::this_thread::sleep_until(begun + std::chrono::nanoseconds(kedge::from_seconds(after_s)));
  };
}

/// Results are the same bytes only for one build on one set of processor features.
void compare_build(const kedge::capture::CaptureHead& head) {
  const auto differ = [](const char* what, const std::string& then, const std::string& now) {
    if (then != now)
      fmt::print(stderr, "note: other {} than when captured ({}; now {}): bytes may differ\n", what, then, now);
  };
  differ("version", head.version, std::string(kedge::version()));
  differ("build", head.build, kedge::build_identification());
  differ("processor features", head.features, kedge::app::processor_features());
}

void report(const kedge::app::ReplaySummary& summary, const kedge::app::Conduit& conduit) {
  fmt::print(stderr,
             "{} records over {:.1f} s gave {} messages; {} damaged places, {} bytes lost, {} records missing\n",
             summary.records, kedge::seconds(summary.last_ns - summary.first_ns), summary.messages,
             summary.damaged_places, summary.bytes_lost, summary.records_missing);
  std::string verdicts;
  for (std::size_t i = 0; i < kedge::app::verdict_count; ++i) {
    const auto code = static_cast<kedge::pipeline::VerdictCode>(i);
    if (conduit.verdicts(code) == 0) continue;
    verdicts += fmt::format("{}{} {}", verdicts.empty() ? "" : ", ", kedge::app::word(code), conduit.verdicts(code));
  }
  fmt::print(stderr, "verdicts: {}\n", verdicts.empty() ? "none" : verdicts);
}

int replay(const Options& options) {
  std::optional<kedge::config::v1::Configuration> other;
  if (!options.config.empty()) {
    kedge::config::Loaded loaded = kedge::config::load(options.config);
    for (const std::string& error : loaded.errors) fmt::print(stderr, "{}\n", error);
    if (!loaded.merged) return exit_usage;
    other = std::move(loaded.merged);
  }
  kedge::capture::FileSource source;
  if (const kedge::Status opened = source.open(options.capture); !opened) return fail(exit_usage, opened.error());
  kedge::Result<kedge::capture::CaptureReader> reader = kedge::capture::CaptureReader::open(source);
  if (!reader) return fail(exit_failure, fmt::format("{}: {}", options.capture, reader.error()));
  if (reader->head_intact()) compare_build(reader->head());
  kedge::Result<kedge::pipeline::Settings> settings = kedge::app::replay_settings(reader->head(), other);
  if (!settings) return fail(exit_failure, fmt::format("{}: {}", options.capture, settings.error()));

  std::error_code absent;
  if (std::filesystem::equivalent(options.capture, options.out, absent)) {
    return fail(exit_usage, fmt::format("--out {} is the capture itself; name another file", options.out));
  }
  kedge::app::MessageFile out;
  if (const kedge::Status opened = out.open(options.out); !opened) return fail(exit_failure, opened.error());
  kedge::app::Conduit conduit(std::move(*settings), out);
  const kedge::app::ReplaySummary summary =
      kedge::app::replay(*reader, conduit, pace_at(options.speed), [&](const kedge::capture::Damage& damage) {
        fmt::print(stderr, "{}: byte {}: {} bytes lost: {}\n", options.capture, damage.offset, damage.bytes_lost,
                   damage.reason);
      });
  if (const kedge::Status closed = out.close(); !closed) return fail(exit_failure, closed.error());
  report(summary, conduit);
  return 0;
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app("kedge-replay passes a capture through the engine and writes the messages it gives.");
  app.set_version_flag("--version", std::string(kedge::version()));
  Options options;
  app.add_option("CAPTURE", options.capture, "Capture to replay (.pcapng)")->required();
  app.add_option("--config", options.config, "Use this configuration instead of the one in the capture");
  app.add_option("--out", options.out, "Write messages to this file, as JSON lines; - is the standard output")
      ->capture_default_str();
  app.add_option("--speed", options.speed, "Replay at this many times the original speed; absent: as fast as possible")
      ->check(CLI::PositiveNumber);
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  try {
    return replay(options);
  } catch (const std::exception& failure) {
    return fail(exit_failure, failure.what());
  }
}
