#include "simulate/configuration.h"

#include <fmt/core.h>
#include <fmt/ranges.h>
#include <google/protobuf/text_format.h>

#include <cmath>

#include "config/address.h"
#include "config/load.h"

namespace kedge::simulate {

namespace {

// Six digits after the point are enough for people and for the run.
double rounded(double value) { return std::round(value * 1e6) / 1e6; }

void fill_site(const fusion::Site& site, config::v1::Configuration& configuration) {
  config::v1::Site& out = *configuration.mutable_site();
  out.set_name(site.name);
  out.set_gravity_mps2(site.gravity_mps2);
  const double declination_rad = wrap_angle(bearing_from_heading(site.magnetic_north_heading_rad, site.bearing_rad));
  out.set_declination_deg(rounded(degrees(declination_rad)));
  if (site.field_ut) out.set_field_ut(*site.field_ut);
  if (site.dip_rad) out.set_dip_deg(rounded(degrees(*site.dip_rad)));
  for (const fusion::Anchor& anchor : site.anchors) {
    config::v1::Anchor& a = *configuration.add_anchors();
    a.set_name(anchor.name);
    a.set_anchor_id(anchor.anchor_id);
    a.set_east_m(anchor.position_m.x());
    a.set_north_m(anchor.position_m.y());
    a.set_up_m(anchor.position_m.z());
  }
}

void fill_tag(const simulation::ScenarioSpec& spec, bool known_start, config::v1::Configuration& configuration) {
  const fusion::Tag tag = simulation::tag_of(spec, known_start);
  config::v1::Tag& out = *configuration.add_tags();
  out.set_name(tag.name);
  out.set_device_id(spec.device_id);
  out.set_profile(tag.profile == fusion::Profile::flyer ? config::v1::Profile::flyer : config::v1::Profile::wheeled);
  out.set_antenna_height_m(tag.antenna_height_m);
  if (!tag.start) return;
  config::v1::Start& start = *out.mutable_start();
  start.set_east_m(rounded(tag.start->position_m.x()));
  start.set_north_m(rounded(tag.start->position_m.y()));
  start.set_position_sigma_m(tag.start->position_sigma_m);
  start.set_heading_deg(rounded(degrees(bearing_from_heading(*tag.start->heading_rad, spec.site.bearing_rad))));
  start.set_heading_sigma_deg(rounded(degrees(tag.start->heading_sigma_rad)));
}

}  // namespace

Result<config::v1::Configuration> configuration_for(const Options& options, const simulation::ScenarioSpec& spec) {
  config::v1::Configuration configuration;
  fill_site(spec.site, configuration);
  fill_tag(spec, !options.unknown_start, configuration);
  if (!options.udp.empty() || !options.has_serial()) {
    config::v1::Link& link = *configuration.add_links();
    link.set_name("radio");
    const auto address = config::parse_host_port(options.udp.empty() ? udp_default : options.udp);
    if (!address) return Error{fmt::format("--udp {}: {}", options.udp, address.error())};
    link.mutable_udp()->set_address(address->host);
    link.mutable_udp()->set_port(address->port);
  }
  if (options.has_serial()) {
    config::v1::Link& link = *configuration.add_links();
    link.set_name("line");
    link.mutable_serial()->set_device(options.pty.empty() ? options.serial : options.pty);
  }
  std::string text;
  google::protobuf::TextFormat::PrintToString(configuration, &text);
  config::Loaded checked = config::load_text(text, "the configuration for this run");
  if (!checked.merged) return Error{fmt::format("{}", fmt::join(checked.errors, "\n"))};
  return *std::move(checked.merged);
}

}  // namespace kedge::simulate
