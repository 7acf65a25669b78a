// kedge-evaluate: how good the positions and speeds of a message file are, measured against the truth.
#include <fmt/core.h>
#include <CLI/CLI.hpp>

#include <cstdio>
#include <exception>
#include <optional>
#include <string>
#include <vector>

#include "core/build_info.h"
#include "evaluate/report.h"
#include "scoring/collector.h"
#include "scoring/messages.h"

namespace {

using kedge::scoring::Collector;
using kedge::scoring::Sample;
using kedge::scoring::TruthFile;

constexpr int exit_failure = 1;
constexpr int exit_usage = 2;

struct Options {
  std::string messages;
  std::string truth;
  std::vector<std::string> tags;
  double skip_s = 0.0;
  double truth_offset_s = 0.0;
  bool second_half = false;
  bool json = false;
};

int fail(const std::string& text) {
  fmt::print(stderr, "kedge-evaluate: {}\n", text);
  return exit_usage;
}

/// Those asked for; else those of the truth; else those of the messages.
kedge::Result<std::vector<std::string>> tags_to_score(const Options& options, const TruthFile& truth,
                                                      const Collector& collector) {
  if (!options.tags.empty()) return options.tags;
  auto tags = truth.tags();
  if (!tags || !tags->empty()) return tags;
  for (const auto& [tag, samples] : collector.samples()) tags->push_back(tag);
  return tags;
}

int evaluate(const Options& options) {
  const auto truth = TruthFile::read(options.truth);
  if (!truth) return fail(truth.error());
  Collector collector;
  const auto read = kedge::scoring::read_messages(
      options.messages, [&collector](const kedge::feed::v1::Message& message) { collector.take(message); });
  if (!read) return fail(read.error());
  if (read->lines_dropped > 0) {
    fmt::print(stderr, "kedge-evaluate: {} lines passed over, the first: {}\n", read->lines_dropped, read->first_drop);
  }
  const auto tags = tags_to_score(options, *truth, collector);
  if (!tags) return fail(tags.error());
  if (tags->empty()) return fail(fmt::format("{}: no positions of any tag", options.messages));

  std::vector<kedge::evaluate::TagFigures> rows;
  for (const std::string& tag : *tags) {
    const auto track = truth->track(tag, options.truth_offset_s);
    if (!track) return fail(fmt::format("{}: {}", options.truth, track.error()));
    kedge::evaluate::TagFigures row{tag, 0, {}};
    if (const auto found = collector.samples().find(tag); found != collector.samples().end()) {
      const std::vector<Sample>& samples = found->second;
      row.messages = samples.size();
      row.figures =
          kedge::scoring::figures_of(samples, *track,
                                     options.second_half ? kedge::scoring::second_half(samples)
                                                         : kedge::scoring::window_after(samples, options.skip_s));
    }
    rows.push_back(std::move(row));
  }
  fmt::print("{}", options.json ? kedge::evaluate::json_lines(rows) : kedge::evaluate::table(rows));
  return 0;
}

}  // namespace

int main(int argc, char** argv) {
  CLI::App app("kedge-evaluate measures the positions and speeds of a message file against the truth.");
  app.set_version_flag("--version", std::string(kedge::version()));
  Options options;
  app.add_option("MESSAGES", options.messages, "Message file, one JSON object a line")->required();
  app.add_option("TRUTH", options.truth, "CSV with t_s, x_m, y_m (tag, z_m, vx_mps, vy_mps, ok), plain or gzip")
      ->required();
  app.add_option("--tag", options.tags, "Score this tag; may be repeated. Default: all");
  auto* skip = app.add_option("--skip", options.skip_s, "Leave out this many seconds at the start")
                   ->check(CLI::NonNegativeNumber);
  app.add_flag("--second-half", options.second_half, "Score the second half of the time only")->excludes(skip);
  app.add_option("--truth-offset", options.truth_offset_s,
                 "Seconds to add to the truth's times to get station monotonic time");
  app.add_flag("--json", options.json, "One JSON object a line for each tag instead of a table");
  try {
    app.parse(argc, argv);
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  try {
    return evaluate(options);
  } catch (const std::exception& failure) {
    fmt::print(stderr, "kedge-evaluate: {}\n", failure.what());
    return exit_failure;
  }
}
