// Small settings and reports from which tests of the feed make messages.
#pragma once

#include <string>
#include <vector>

#include "feed/messages.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"

namespace kedge::test {

inline pipeline::Settings feed_settings(double site_bearing_deg = 0.0) {
  pipeline::Settings settings;
  settings.site.name = "nursery";
  settings.site.bearing_rad = radians(site_bearing_deg);
  settings.site.anchors.push_back({.name = "mast", .anchor_id = 1});
  for (const char* name : {"cart-1", "cart-2", "flyer-1"}) {
    pipeline::TagSettings tag;
    tag.model.name = name;
    settings.tags.push_back(tag);
  }
  return settings;
}

/// Keeps every message.
class Messages : public feed::MessageSink {
 public:
  void message(const feed::v1::Message& message) override { list.push_back(message); }
  std::vector<feed::v1::Message> list;
};

/// A settled tag 10 m east, 20 m north, moving north at 2 m/s.
inline pipeline::TrackReport settled_report(std::uint32_t tag, TimeNs time_ns) {
  pipeline::TrackReport report;
  report.tag = tag;
  report.standing = pipeline::Standing::settled;
  report.radius_95_m = 0.75;
  report.estimate.time_ns = time_ns;
  report.estimate.phase = fusion::Phase::single;
  report.estimate.lead.position_m = {10.0, 20.0, 0.5};
  report.estimate.lead.position_covariance_m2 << 0.09, 0.01, 0.0, 0.01, 0.16, 0.0, 0.0, 0.0, 0.04;
  report.estimate.lead.velocity_mps = {0.0, 2.0, 0.0};
  report.estimate.lead.velocity_covariance_m2ps2 = Vector3(0.01, 0.04, 0.0025).asDiagonal();
  report.estimate.lead.probability = 1.0;
  report.estimate.heading_rad = radians(90.0);
  report.estimate.heading_sigma_rad = radians(3.0);
  return report;
}

}  // namespace kedge::test
