#include "convert/configuration.h"

#include <fmt/core.h>
#include <fmt/ranges.h>
#include <google/protobuf/text_format.h>

#include "config/load.h"

namespace kedge::convert {

namespace {

// Where the packets of the logs seem to have arrived, and where a replayed station would listen.
constexpr std::uint32_t link_port = 47800;

Status fill_tag(const LogTag& from, const Options& options, config::v1::Tag& tag) {
  tag.set_name(from.name);
  tag.set_device_id(from.device_id);
  config::v1::Profile::Value profile{};
  if (!config::v1::Profile::Value_Parse(options.profile, &profile)) {
    return Error{fmt::format("--profile {}: it must be wheeled, walker, flyer or free", options.profile)};
  }
  tag.set_profile(profile);
  if (options.height_m) tag.set_antenna_height_m(*options.height_m);
  if (options.range_lag_s) tag.set_range_lag_s(*options.range_lag_s);

  config::v1::Mounting& mounting = *tag.mutable_mounting();
  mounting.set_roll_deg(options.mounting_roll_deg);
  mounting.set_pitch_deg(options.mounting_pitch_deg);
  mounting.set_yaw_deg(options.mounting_yaw_deg);
  if (!options.antenna_m.empty()) {
    mounting.set_antenna_forward_m(options.antenna_m[0]);
    mounting.set_antenna_left_m(options.antenna_m[1]);
    mounting.set_antenna_up_m(options.antenna_m[2]);
  }
  if (options.start.empty()) return {};
  config::v1::Start& start = *tag.mutable_start();
  start.set_east_m(options.start[0]);
  start.set_north_m(options.start[1]);
  start.set_position_sigma_m(options.start[2]);
  if (options.start.size() == 3) return {};
  start.set_heading_deg(options.start[3]);
  start.set_heading_sigma_deg(options.start[4]);
  return {};
}

}  // namespace

Result<config::v1::Configuration> configuration_for(const LogFolder& folder, const Options& options) {
  config::v1::Configuration configuration;
  configuration.mutable_site()->set_name("log");
  for (const AnchorRow& row : folder.anchors()) {
    config::v1::Anchor& anchor = *configuration.add_anchors();
    anchor.set_name(fmt::format("anchor{}", row.anchor_id));
    anchor.set_anchor_id(row.anchor_id);
    anchor.set_east_m(row.east_m);
    anchor.set_north_m(row.north_m);
    anchor.set_up_m(row.up_m);
    if (options.range_sigma_m) anchor.set_range_sigma_m(*options.range_sigma_m);
  }
  for (const LogTag& tag : folder.tags()) {
    if (Status status = fill_tag(tag, options, *configuration.add_tags()); !status) return Error{status.error()};
  }
  config::v1::Method::Value method{};
  if (!config::v1::Method::Value_Parse(options.method, &method)) {
    return Error{fmt::format("--method {}: it must be standard, speed_aided or plain", options.method)};
  }
  configuration.set_method(method);
  config::v1::Link& link = *configuration.add_links();
  link.set_name("log");
  link.mutable_udp()->set_address("127.0.0.1");
  link.mutable_udp()->set_port(link_port);

  std::string text;
  google::protobuf::TextFormat::PrintToString(configuration, &text);
  config::Loaded checked = config::load_text(text, "the configuration for these logs");
  if (!checked.merged) return Error{fmt::format("{}", fmt::join(checked.errors, "\n"))};
  return *std::move(checked.merged);
}

}  // namespace kedge::convert
