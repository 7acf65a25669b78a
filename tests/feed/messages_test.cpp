#include "feed/messages.h"

#include <catch2/catch.hpp>
#include <functional>
#include <limits>
#include <utility>

#include "core/archive.h"
#include "feed/encoding.h"
#include "support/feed_settings.h"

namespace kedge::feed {
namespace {

using pipeline::Standing;
using test::feed_settings;
using test::settled_report;

constexpr double nan = std::numeric_limits<double>::quiet_NaN();
constexpr TimeNs utc_offset_ns = 1'700'000'000 * ns_per_s;

/// Position and Speed of one report.
std::pair<v1::Position, v1::Speed> track(const pipeline::TrackReport& report, double site_bearing_deg = 0.0) {
  const pipeline::Settings settings = feed_settings(site_bearing_deg);
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.utc_offset(utc_offset_ns);
  stream.publish(report);
  REQUIRE(messages.list.size() == 2);
  return {messages.list[0].position(), messages.list[1].speed()};
}

TEST_CASE("a settled track gives the whole of Position and Speed") {
  const auto [position, speed] = track(settled_report(0, 5 * ns_per_s));
  CHECK(position.tag() == "cart-1");
  CHECK(position.time_ns() == 5'000'000'000);
  CHECK(position.utc_ns() == 1'700'000'005'000'000'000);
  CHECK(position.standing() == v1::Standing::settled);
  CHECK(position.east_m() == 10.0);
  CHECK(position.north_m() == 20.0);
  CHECK(position.up_m() == 0.5);
  const std::vector<double> covariance(position.covariance_m2().begin(), position.covariance_m2().end());
  CHECK(covariance == std::vector<double>{0.09, 0.01, 0.0, 0.16, 0.0, 0.04});
  CHECK(position.radius_95_m() == 0.75);
  CHECK(position.probability() == 1.0);
  CHECK_FALSE(position.has_mirror());
  CHECK_FALSE(position.has_ring_radius_m());
  CHECK_FALSE(position.has_ring_anchor());

  CHECK(speed.tag() == "cart-1");
  CHECK(speed.utc_ns() == position.utc_ns());
  CHECK(speed.speed_mps() == 2.0);
  CHECK(speed.speed_sigma_mps() == Approx(0.2));
  CHECK(speed.climb_mps() == 0.0);
  CHECK(speed.climb_sigma_mps() == Approx(0.05));
  CHECK(std::abs(speed.course_deg()) < 1e-9);
  CHECK(speed.course_sigma_deg() == Approx(degrees(0.1 / 2.0)));
  CHECK(std::abs(speed.heading_deg()) < 1e-9);
  CHECK(speed.heading_sigma_deg() == Approx(3.0));
}

TEST_CASE("course and heading count from true north, clockwise, whatever way the site is turned") {
  pipeline::TrackReport report = settled_report(0, 0);
  report.estimate.lead.velocity_mps = {2.0, 0.0, 0.3};
  report.estimate.heading_rad = radians(-135.0);
  const auto [position, speed] = track(report);
  CHECK(speed.course_deg() == Approx(90.0));
  CHECK(speed.heading_deg() == Approx(225.0));
  CHECK(speed.climb_mps() == 0.3);
  // The y axis points to 300 degrees, so the x axis points to 30.
  const auto [turned_position, turned] = track(report, 300.0);
  CHECK(turned.course_deg() == Approx(30.0));
  CHECK(turned.heading_deg() == Approx(165.0));
  CHECK(turned_position.east_m() == position.east_m());
}

TEST_CASE("no position where none is known") {
  for (const Standing standing : {Standing::silent, Standing::waking, Standing::ring}) {
    INFO(static_cast<int>(standing));
    pipeline::TrackReport report = settled_report(1, 0);
    report.standing = standing;
    report.estimate.ring_radius_m = 17.5;
    const auto [position, speed] = track(report);
    CHECK_FALSE(position.has_east_m());
    CHECK_FALSE(position.has_north_m());
    CHECK_FALSE(position.has_up_m());
    CHECK(position.covariance_m2().empty());
    CHECK_FALSE(position.has_radius_95_m());
    CHECK_FALSE(position.has_probability());
    CHECK(position.has_ring_radius_m() == (standing == Standing::ring));
    CHECK(position.ring_radius_m() == (standing == Standing::ring ? 17.5 : 0.0));
    CHECK(position.ring_anchor() == (standing == Standing::ring ? "mast" : ""));
    CHECK_FALSE(speed.has_speed_mps());
    CHECK_FALSE(speed.has_course_deg());
    CHECK(speed.has_heading_deg() == (standing == Standing::ring));
  }
}

TEST_CASE("the mirror stands beside the position while there are two") {
  pipeline::TrackReport report = settled_report(0, 0);
  report.standing = Standing::twofold;
  report.estimate.phase = fusion::Phase::twofold;
  report.estimate.lead.probability = 0.625;
  report.estimate.mirror = report.estimate.lead;
  report.estimate.mirror.position_m = {-10.0, 20.0, 0.5};
  report.estimate.mirror.probability = 0.375;
  const auto [position, speed] = track(report);
  CHECK(position.standing() == v1::Standing::twofold);
  CHECK(position.probability() == 0.625);
  CHECK(position.mirror().east_m() == -10.0);
  CHECK(position.mirror().north_m() == 20.0);
  CHECK(position.mirror().up_m() == 0.5);
  CHECK(position.mirror().covariance_m2_size() == 6);
  CHECK(position.mirror().probability() == 0.375);
}

TEST_CASE("no course at rest, nor below two standard deviations of the speed") {
  pipeline::TrackReport report = settled_report(0, 0);
  report.estimate.lead.velocity_mps = {0.0, 0.39, 0.0};  // sigma along north is 0.2
  CHECK_FALSE(track(report).second.has_course_deg());
  report.estimate.lead.velocity_mps = {0.0, 0.41, 0.0};
  CHECK(track(report).second.has_course_deg());
  report.estimate.at_rest = true;
  CHECK_FALSE(track(report).second.has_course_deg());
  CHECK_FALSE(track(report).second.has_course_sigma_deg());
  report.estimate.lead.velocity_mps.setZero();
  report.estimate.at_rest = false;
  const v1::Speed speed = track(report).second;
  CHECK_FALSE(speed.has_course_deg());
  CHECK(speed.speed_mps() == 0.0);
  CHECK(speed.speed_sigma_mps() == Approx(0.2));  // the larger spread
}

TEST_CASE("a figure that is not finite is never published") {
  const auto refused = [](const std::function<void(pipeline::TrackReport&)>& spoil) {
    pipeline::TrackReport report = settled_report(0, 0);
    report.estimate.phase = fusion::Phase::twofold;
    report.estimate.mirror = report.estimate.lead;
    spoil(report);
    const auto [position, speed] = track(report);
    v1::Message message;
    *message.mutable_position() = position;
    const std::string json = encode(message, Encoding::json);
    CHECK(json.find("nan") == std::string::npos);
    CHECK(json.find("inf") == std::string::npos);
    return std::pair(position, speed);
  };
  CHECK_FALSE(refused([](auto& r) { r.estimate.lead.position_m.y() = nan; }).first.has_east_m());
  CHECK_FALSE(refused([](auto& r) { r.estimate.lead.position_covariance_m2(2, 2) = nan; }).first.has_north_m());
  CHECK_FALSE(refused([](auto& r) { r.estimate.lead.velocity_mps.x() = nan; }).second.has_speed_mps());
  CHECK_FALSE(refused([](auto& r) { r.estimate.mirror.probability = nan; }).first.has_mirror());
  CHECK_FALSE(
      refused([](auto& r) { r.radius_95_m = std::numeric_limits<double>::infinity(); }).first.has_radius_95_m());
  CHECK_FALSE(refused([](auto& r) { r.estimate.heading_rad = nan; }).second.has_heading_deg());
  CHECK_FALSE(refused([](auto& r) { r.estimate.heading_sigma_rad = nan; }).second.has_heading_deg());
}

TEST_CASE("health of a tag, an anchor and the station") {
  const pipeline::Settings settings = feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.utc_offset(utc_offset_ns);
  pipeline::TagHealthReport tag;
  tag.tag = 2;
  tag.time_ns = 9 * ns_per_s;
  tag.standing = Standing::coasting;
  tag.standing_since_ns = 8 * ns_per_s;
  tag.concerns.push_back({pipeline::Concern::range_stale, 7 * ns_per_s, 2.5});
  tag.concerns.push_back({pipeline::Concern::battery_low, 6 * ns_per_s, nan});
  tag.inertial_rate_hz = 100;
  tag.range_rate_hz = 20;
  tag.missing_share = 0.25;
  tag.range_age_s = 2.5;
  tag.ranges_used = 40;
  tag.ranges_refused = 2;
  tag.restarts = 1;
  stream.publish(tag);
  pipeline::AnchorHealthReport anchor;
  anchor.time_ns = 10 * ns_per_s;
  anchor.range_rate_hz = 60;
  anchor.tags_heard = 3;
  anchor.age_s = 0.05;
  stream.publish(anchor);
  pipeline::StationHealthReport station;
  station.time_ns = 11 * ns_per_s;
  station.records = 1000;
  station.packets = 900;
  station.packets_refused = 9;
  station.unknown_device_packets = 5;
  station.unknown_devices = 2;
  station.links_open = 1;
  station.links = 2;
  station.utc_synchronised = true;
  stream.publish(station);
  REQUIRE(messages.list.size() == 3);

  // Spelled out, so that every field is seen to arrive and nothing besides.
  CHECK(messages.list[0].ShortDebugString() ==
        "sequence: 1 health { tag: \"flyer-1\" time_ns: 9000000000 utc_ns: 1700000009000000000 "
        "concerns { concern: range_stale since_ns: 7000000000 since_utc_ns: 1700000007000000000 figure: 2.5 } "
        "concerns { concern: battery_low since_ns: 6000000000 since_utc_ns: 1700000006000000000 } "
        "tag_health { standing: coasting standing_since_ns: 8000000000 standing_since_utc_ns: 1700000008000000000 "
        "inertial_rate_hz: 100 range_rate_hz: 20 missing_share: 0.25 range_age_s: 2.5 ranges_used: 40 "
        "ranges_refused: 2 restarts: 1 } }");
  CHECK(messages.list[1].ShortDebugString() ==
        "sequence: 2 health { anchor: \"mast\" time_ns: 10000000000 utc_ns: 1700000010000000000 "
        "anchor_health { range_rate_hz: 60 tags_heard: 3 age_s: 0.05 } }");
  CHECK(messages.list[2].ShortDebugString() ==
        "sequence: 3 health { station: \"nursery\" time_ns: 11000000000 utc_ns: 1700000011000000000 "
        "station_health { records: 1000 packets: 900 packets_refused: 9 unknown_device_packets: 5 "
        "unknown_devices: 2 links_open: 1 links: 2 utc_synchronised: true } }");
}

TEST_CASE("messages are numbered from 1 without holes, also on from a checkpoint") {
  const pipeline::Settings settings = feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.publish(settled_report(0, 0));
  stream.publish(pipeline::PulseReport{ns_per_s});
  stream.utc_offset(5);
  CHECK(stream.sequence() == 3);
  Saver saver;
  saver(stream);

  MessageStream resumed(settings, messages);
  Loader loader(saver.bytes());
  loader(resumed);
  REQUIRE(loader.ok());
  resumed.publish(pipeline::PulseReport{2 * ns_per_s});
  REQUIRE(messages.list.size() == 4);
  for (std::size_t i = 0; i < messages.list.size(); ++i) CHECK(messages.list[i].sequence() == i + 1);
  CHECK(messages.list.back().pulse().utc_ns() == 2'000'000'005);
}

TEST_CASE("times at the ends of what fits are held there") {
  const pipeline::Settings settings = feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.utc_offset(std::numeric_limits<TimeNs>::max());
  stream.publish(pipeline::PulseReport{1});
  stream.utc_offset(std::numeric_limits<TimeNs>::min());
  stream.publish(pipeline::PulseReport{-1});
  CHECK(messages.list[0].pulse().utc_ns() == std::numeric_limits<TimeNs>::max());
  CHECK(messages.list[1].pulse().utc_ns() == std::numeric_limits<TimeNs>::min());
}

}  // namespace
}  // namespace kedge::feed
