// kedge-convert: logs in CSV to a capture, and captures and message files back to CSV.
#include <fmt/core.h>
#include <CLI/CLI.hpp>

#include <cstdio>
#include <filesystem>
#include <fstream>
#include <iterator>

#include "capture/file_source.h"
#include "config/print.h"
#include "convert/configuration.h"
#include "convert/from_capture.h"
#include "convert/from_messages.h"
#include "convert/log_folder.h"
#include "convert/options.h"
#include "convert/to_capture.h"
#include "core/build_info.h"
#include "recording/new_file.h"

namespace {

using namespace kedge;
using convert::Options;

constexpr int exit_failure = 1;
constexpr int exit_usage = 2;

int fail(int code, const std::string& text) {
  fmt::print(stderr, "kedge-convert: {}\n", text);
  return code;
}

int from_logs(const Options& options) {
  const auto folder = convert::LogFolder::read(options.from, options);
  if (!folder) return fail(exit_usage, folder.error());
  const auto configuration = convert::configuration_for(*folder, options);
  if (!configuration) return fail(exit_usage, configuration.error());
  const std::string& config_out = options.config_out;
  if (const Status status = recording::check_new(config_out); !status) return fail(exit_failure, status.error());
  const auto done = convert::write_capture(*folder, *configuration, options.to);
  if (!done) return fail(exit_failure, done.error());
  if (!config_out.empty()) {
    const Status written = recording::write_new(config_out, config::print(*configuration));
    if (!written) return fail(exit_failure, written.error());
  }
  fmt::print(stderr, "{} packets of {} tags\n", done->packets, folder->tags().size());
  if (const std::int64_t shift_s = folder->shift_s(); shift_s != 0) {
    fmt::print(stderr,
               "times of the logs begin below 0, those of a station never do: {0} s was added to all; truth with the "
               "times of the logs needs kedge-evaluate --truth-offset {0}\n",
               shift_s);
  }
  if (done->refused > 0) {
    fmt::print(stderr, "{} of them a station refuses, the first: {}\n", done->refused, done->first_refusal);
  }
  return 0;
}

int from_capture(const Options& options) {
  capture::FileSource source;
  if (const Status status = source.open(options.from); !status) return fail(exit_usage, status.error());
  auto reader = capture::CaptureReader::open(source);
  if (!reader) return fail(exit_usage, fmt::format("{}: {}", options.from, reader.error()));
  const auto done = convert::write_tables(*reader, options.to);
  if (!done) return fail(exit_failure, done.error());
  for (const capture::Damage& damage : done->damages) {
    fmt::print(stderr, "{}: byte {}: {} bytes lost: {}\n", options.from, damage.offset, damage.bytes_lost,
               damage.reason);
  }
  if (!done->note.empty()) fmt::print(stderr, "{}: {}\n", options.from, done->note);
  fmt::print(stderr, "{} records: {} inertial, {} range and {} travel rows; {} unreadable, {} bytes lost\n",
             done->records, done->inertial_rows, done->range_rows, done->travel_rows, done->unreadable,
             done->bytes_lost);
  return 0;
}

int from_messages(const Options& options) {
  const auto done = convert::write_message_tables(options.from, options.to);
  if (!done) return fail(exit_failure, done.error());
  if (done->read.lines_dropped > 0) {
    fmt::print(stderr, "{} lines passed over, the first: {}\n", done->read.lines_dropped, done->read.first_drop);
  }
  fmt::print(stderr, "{} messages: {} position, {} speed and {} health rows\n", done->read.messages,
             done->position_rows, done->speed_rows, done->health_rows);
  return 0;
}

enum class Kind : std::uint8_t { logs, capture, messages };

Result<Kind> kind_of(const std::string& path) {
  if (std::filesystem::is_directory(path)) return Kind::logs;
  if (!std::filesystem::exists(path)) return Error{fmt::format("{}: no such file or folder", path)};
  std::ifstream file(path, std::ios::binary);
  std::string front(64, '\0');
  file.read(front.data(), static_cast<std::streamsize>(front.size()));
  front.resize(static_cast<std::size_t>(file.gcount()));
  const std::size_t first = front.find_first_not_of(" \t\r\n");
  if (first != std::string::npos && front[first] == '{') return Kind::messages;
  // Whatever else it is, the reader of captures says so.
  return Kind::capture;
}

int convert_one(const Options& options, const CLI::App& app) {
  const Result<Kind> kind = kind_of(options.from);
  if (!kind) return fail(exit_usage, kind.error());
  if (*kind == Kind::logs) return from_logs(options);
  for (const CLI::Option* option : app.get_options()) {
    if (option->count() > 0 && option->nonpositional()) {
      return fail(exit_usage,
                  fmt::format("{} is for folders of logs, but {} is a file", option->get_name(), options.from));
    }
  }
  return *kind == Kind::capture ? from_capture(options) : from_messages(options);
}

void add_options(CLI::App& app, Options& options) {
  app.add_option(
         "FROM", options.from,
         "A folder of logs (ranges.csv, anchors.csv, and inertial.csv, odometry.csv where there are any; plain or "
         "gzip), a capture, or a message file")
      ->required();
  app.add_option("TO", options.to, "The capture to write (from logs), or the folder for the tables; never overwritten")
      ->required();
  app.add_option("--config-out", options.config_out,
                 "Also write the configuration that fits the logs to this file; never overwritten");
  app.add_option("--profile", options.profile, "How the tags move")
      ->check(CLI::IsMember({"wheeled", "walker", "flyer", "free"}));
  app.add_option("--method", options.method, "Method of fusion")
      ->check(CLI::IsMember({"standard", "speed_aided", "plain"}));
  app.add_option("--anchors", options.anchors, "Only these, by number: 4,5")->delimiter(',');
  app.add_option("--tags", options.tags, "Only these, as in the logs: 1,2")->delimiter(',');
  app.add_option("--mounting-roll", options.mounting_roll_deg, "Inertial unit to vehicle: degrees about fixed x");
  app.add_option("--mounting-pitch", options.mounting_pitch_deg, "then about fixed y");
  app.add_option("--mounting-yaw", options.mounting_yaw_deg, "then about fixed z");
  app.add_option("--antenna", options.antenna_m,
                 "F,L,U: range antenna forward, left and up of the inertial unit, metres")
      ->delimiter(',')
      ->expected(3);
  app.add_option("--height", options.height_m, "Height of the range antenna above the ground, metres");
  app.add_option("--start", options.start,
                 "E,N,SIGMA[,HEADING,SIGMA]: where the tag begins, metres, and its heading from north, degrees")
      ->delimiter(',')
      ->expected(3, 5);
  app.add_option("--range-lag", options.range_lag_s, "A range stamped t belongs to t minus this, seconds");
  app.add_option("--range-sigma", options.range_sigma_m, "Standard deviation of a range, metres");
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app("kedge-convert makes a capture of CSV logs, or CSV tables of a capture or a message file.");
  app.set_version_flag("--version", std::string(kedge::version()));
  Options options;
  add_options(app, options);
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  if (options.start.size() == 4) return fail(exit_usage, "--start: a heading needs its sigma: E,N,SIGMA,HEADING,SIGMA");
  try {
    return convert_one(options, app);
  } catch (const std::exception& failure) {
    return fail(exit_failure, failure.what());
  }
}
