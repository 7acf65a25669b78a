// proto/README.md shows messages as they are; these tests keep them so.
#include <google/protobuf/util/json_util.h>

#include <catch2/catch.hpp>
#include <fstream>
#include <map>
#include <sstream>

#include "feed/distributor.h"
#include "feed/greeting.h"
#include "support/feed_settings.h"

namespace kedge::feed {
namespace {

std::string readme() {
  std::ifstream in(KEDGE_SOURCE_DIR "/proto/README.md");
  REQUIRE(in);
  std::string text(std::istreambuf_iterator<char>(in), {});
  const auto messages = text.find("\n## Messages");
  REQUIRE(messages != std::string::npos);
  return text.substr(messages, text.find("\n## ", messages + 1) - messages);
}

/// A cart that had two possible places and then turned; a little later its ranges stop.
std::vector<v1::Message> story() {
  const pipeline::Settings settings = test::feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.utc_offset(1'796'000'000 * ns_per_s);
  pipeline::TrackReport report = test::settled_report(0, 72'500 * ns_per_ms);
  report.standing = pipeline::Standing::ring;
  report.estimate.phase = fusion::Phase::ring;
  report.estimate.ring_radius_m = 22.25;
  stream.publish(report);
  report = test::settled_report(0, 73'500 * ns_per_ms);
  report.standing = pipeline::Standing::twofold;
  report.radius_95_m = 20.5;
  report.estimate.phase = fusion::Phase::twofold;
  report.estimate.lead.probability = 0.75;
  report.estimate.mirror = report.estimate.lead;
  report.estimate.mirror.position_m.x() = -10.0;
  report.estimate.mirror.probability = 0.25;
  stream.publish(report);
  stream.publish(test::settled_report(0, 80'500 * ns_per_ms));
  pipeline::TagHealthReport health;
  health.time_ns = 91'000 * ns_per_ms;
  health.standing = pipeline::Standing::coasting;
  health.standing_since_ns = 90'500 * ns_per_ms;
  health.concerns.push_back({pipeline::Concern::range_stale, 88'500 * ns_per_ms, 2.5});
  health.inertial_rate_hz = 100;
  health.missing_share = 0.02;
  health.inertial_age_s = 0.04;
  health.range_age_s = 2.5;
  health.battery_v = 3.9;
  health.clock_skew_ppm = -12.5;
  health.ranges_used = 310;
  health.ranges_refused = 4;
  stream.publish(health);
  pipeline::AnchorHealthReport anchor;
  anchor.time_ns = 91'000 * ns_per_ms;
  anchor.range_rate_hz = 96;
  anchor.tags_heard = 5;
  anchor.age_s = 0.0625;
  stream.publish(anchor);
  pipeline::StationHealthReport station;
  station.time_ns = 91'000 * ns_per_ms;
  station.records = 15210;
  station.packets = 14300;
  station.links_open = 2;
  station.links = 2;
  station.utc_synchronised = true;
  stream.publish(station);
  stream.publish(pipeline::PulseReport{91'000 * ns_per_ms});
  messages.list.insert(messages.list.begin(), greeting(settings, "0.1.0", 0));
  v1::Message gap;
  gap.mutable_gap()->set_messages_lost(118);
  gap.mutable_gap()->set_first_sequence(4001);
  gap.mutable_gap()->set_last_sequence(4160);
  messages.list.push_back(gap);
  return messages.list;
}

TEST_CASE("the document shows every kind of message as the station writes it") {
  const std::string text = readme();
  for (const v1::Message& message : story()) {
    if (message.has_speed() && message.sequence() != 6) continue;  // one Speed is enough
    const std::string line = encode(message, Encoding::json);
    INFO("proto/README.md should have the line\n    " << line);
    CHECK(text.find("\n    " + line) != std::string::npos);
  }
}

TEST_CASE("every line of JSON in the document is a message or a request") {
  std::istringstream lines(readme());
  int messages = 0;
  int requests = 0;
  for (std::string line; std::getline(lines, line);) {
    if (!line.starts_with("    {")) continue;
    INFO(line);
    if (line.find("{\"subscribe\"") != std::string::npos) {
      RequestReader reader;
      const std::string bytes = line.substr(4) + "\n";
      const auto request = reader.take(std::as_bytes(std::span(bytes)));
      REQUIRE(request.ok());
      REQUIRE(request->has_value());
      CHECK(Subscription::make(**request, test::feed_settings()).ok());
      ++requests;
    } else if (line.find("{\"error\"") == std::string::npos) {
      v1::Message message;
      CHECK(google::protobuf::util::JsonStringToMessage(line, &message).ok());
      ++messages;
    }
  }
  CHECK(messages >= 10);
  CHECK(requests >= 2);
}

TEST_CASE("the table of concerns names each one") {
  const std::string text = readme();
  for (int number = 1; number < v1::Concern::Value_ARRAYSIZE; ++number) {
    const std::string row = "\n| `" + v1::Concern::Value_Name(static_cast<v1::Concern::Value>(number)) + "` | ";
    INFO(row);
    CHECK(text.find(row) != std::string::npos);
  }
}

TEST_CASE("the caution stands in the document word for word") {
  std::string text = readme();
  for (char& c : text) c = c == '\n' ? ' ' : c;
  CHECK(text.find(caution()) != std::string::npos);
}

}  // namespace
}  // namespace kedge::feed
