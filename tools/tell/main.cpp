// kedge-tell: an operator's word about one tag to the running daemon, such as "cart-3 stands at the dock, heading 90".
#include <fmt/core.h>
#include <fmt/ranges.h>
#include <google/protobuf/struct.pb.h>
#include <google/protobuf/util/json_util.h>

#include <CLI/CLI.hpp>
#include <asio/io_context.hpp>
#include <asio/local/stream_protocol.hpp>
#include <asio/read_until.hpp>
#include <asio/write.hpp>
#include <chrono>
#include <cstdio>
#include <optional>
#include <string>
#include <vector>

#include "config/load.h"
#include "core/build_info.h"
#include "core/result.h"
#include "io/control_socket.h"

namespace {

using kedge::Error;
using kedge::Result;
using kedge::Status;
using kedge::station::v1::Correction;

constexpr int exit_refused = 1;
constexpr int exit_usage = 2;
constexpr int answer_seconds_max = 10;
constexpr std::size_t answer_bytes_max = 65536;

struct Options {
  std::string control;
  std::string config;
  std::string tag;
  std::vector<double> at;
  std::string place;
  std::optional<double> sigma_m;
  std::optional<double> heading_deg;
  std::optional<double> heading_sigma_deg;
};

// What the configuration adds: where the control socket is, and where the place is.
Status complete(Options& options) {
  if (options.config.empty()) {
    if (!options.place.empty()) return Error{"--place needs --config FILE, which says where the place is"};
    if (options.control.empty())
      return Error{"give --control PATH, or --config FILE, which says where the control socket is"};
    return {};
  }
  const kedge::config::Loaded loaded = kedge::config::load(options.config);
  if (!loaded.merged) {
    return Error{fmt::format("{}", fmt::join(loaded.errors, "\n"))};
  }
  if (options.control.empty()) options.control = loaded.merged->control().unix();
  if (options.control.empty()) {
    return Error{fmt::format(
        "{} has no control.unix: the daemon takes no word; give --control PATH if another one does", options.config)};
  }
  if (options.place.empty()) return {};
  std::string known;
  for (const kedge::config::v1::Place& place : loaded.merged->site().places()) {
    if (place.name() == options.place) {
      options.at = {place.east_m(), place.north_m()};
      return {};
    }
    known += (known.empty() ? "" : ", ") + place.name();
  }
  return Error{fmt::format("{}: there is no place \"{}\" in site.places; there {}", options.config, options.place,
                           known.empty() ? "is none" : "are " + known)};
}

Result<std::string> request_line(const Options& options) {
  kedge::station::v1::StationRecord record;
  Correction& correction = *record.mutable_correction();
  correction.set_tag(options.tag);
  if (!options.at.empty()) {
    correction.set_east_m(options.at[0]);
    correction.set_north_m(options.at[1]);
  }
  if (options.sigma_m) correction.set_position_sigma_m(*options.sigma_m);
  if (options.heading_deg) correction.set_heading_deg(*options.heading_deg);
  if (options.heading_sigma_deg) correction.set_heading_sigma_deg(*options.heading_sigma_deg);
  google::protobuf::util::JsonPrintOptions print;
  print.preserve_proto_field_names = true;
  std::string line;
  if (!google::protobuf::util::MessageToJsonString(record, &line, print).ok())
    return Error{"the tag's name is no text"};
  // The daemon's own check, before it is asked.
  if (const Result<Correction> good = kedge::io::parse_correction(line); !good) return Error{good.error()};
  return line + "\n";
}

// The daemon's one line.
Result<std::string> ask(const std::string& path, const std::string& line) {
  using Local = asio::local::stream_protocol;
  if (path.size() > 107) return Error{fmt::format("{}: the path of a socket has at most 107 bytes", path)};
  asio::io_context context;
  Local::socket socket(context);
  asio::error_code error;
  socket.connect(Local::endpoint(path), error);
  if (error)
    return Error{
        fmt::format("{}: {}; is kedged running with this control socket, and may you use it?", path, error.message())};
  asio::error_code outcome = asio::error::timed_out;
  std::string answer;
  asio::async_write(socket, asio::buffer(line), [&](const asio::error_code& write_error, std::size_t) {
    outcome = write_error;
    if (write_error) return;
    outcome = asio::error::timed_out;
    asio::async_read_until(socket, asio::dynamic_buffer(answer, answer_bytes_max), '\n',
                           [&](const asio::error_code& read_error, std::size_t) { outcome = read_error; });
  });
  context.run_for(std::chrono::seconds(answer_seconds_max));
  if (outcome) return Error{fmt::format("{}: no answer within {} s ({})", path, answer_seconds_max, outcome.message())};
  return answer.substr(0, answer.find('\n'));
}

// The words of {"error":"..."}; the line itself if it is none.
std::string refusal(const std::string& answer) {
  google::protobuf::Struct object;
  if (!google::protobuf::util::JsonStringToMessage(answer, &object).ok()) return answer;
  const auto error = object.fields().find("error");
  return error == object.fields().end() ? answer : error->second.string_value();
}

int fail(int code, const std::string& why) {
  fmt::print(stderr, "kedge-tell: {}\n", why);
  return code;
}

}  // namespace

int main(int argc, char** argv) {
  Options options;
  CLI::App app("kedge-tell: tell the running daemon where a tag stands or where it points.");
  app.set_version_flag("--version", std::string(kedge::version()));
  app.add_option("tag", options.tag, "name of the tag")->required();
  app.add_option("--control", options.control, "the daemon's control socket; by default the configuration's");
  app.add_option("--config", options.config, "the station's configuration: control socket and places");
  auto* at = app.add_option("--at", options.at, "EAST,NORTH in metres, site axes")->delimiter(',')->expected(2);
  auto* place = app.add_option("--place", options.place, "a place of the configuration instead")->excludes(at);
  app.add_option("--sigma", options.sigma_m, "standard deviation of the position in metres; default 0.5");
  auto* heading = app.add_option("--heading", options.heading_deg, "degrees from true north, clockwise");
  app.add_option("--heading-sigma", options.heading_sigma_deg, "standard deviation in degrees; default 5")
      ->needs(heading);
  try {
    app.parse(argc, argv);
    if (at->count() + place->count() + heading->count() == 0) {
      return fail(exit_usage, "there is nothing to tell: give --at EAST,NORTH, --place NAME or --heading DEGREES");
    }
  } catch (const CLI::ParseError& error) {
    return app.exit(error) == 0 ? 0 : exit_usage;
  }
  if (const Status completed = complete(options); !completed) return fail(exit_usage, completed.error());
  const Result<std::string> line = request_line(options);
  if (!line) return fail(exit_usage, line.error());
  const Result<std::string> answer = ask(options.control, *line);
  if (!answer) return fail(exit_refused, answer.error());
  if (*answer != "{\"accepted\":true}")
    return fail(exit_refused, fmt::format("the daemon refused: {}", refusal(*answer)));
  fmt::print("{}: accepted\n", options.tag);
  return 0;
}
