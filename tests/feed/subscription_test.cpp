#include "feed/subscription.h"

#include <catch2/catch.hpp>
#include <limits>
#include <random>

#include "support/feed_settings.h"

namespace kedge::feed {
namespace {

using test::feed_settings;

std::span<const std::byte> bytes_of(std::string_view text) { return std::as_bytes(std::span(text)); }

/// What the reader makes of the text in one piece: a request, or nothing yet.
std::optional<Request> read(std::string_view text) {
  RequestReader reader;
  auto request = reader.take(bytes_of(text));
  INFO(text);
  REQUIRE(request.ok());
  return *request;
}

std::string error_of(std::string_view text) {
  RequestReader reader;
  const auto request = reader.take(bytes_of(text));
  INFO(text);
  REQUIRE_FALSE(request.ok());
  return request.error();
}

std::string delimited(const v1::ClientMessage& message) {
  const std::string body = message.SerializeAsString();
  std::string bytes;
  std::size_t length = body.size();
  for (; length > 127; length >>= 7) bytes += static_cast<char>(0x80 | (length & 0x7f));
  return bytes + static_cast<char>(length) + body;
}

/// A Subscribe that takes exactly `size` bytes.
v1::ClientMessage sized(std::size_t size) {
  v1::ClientMessage message;
  v1::Subscribe& subscribe = *message.mutable_subscribe();
  std::string& name = *subscribe.add_tags();
  while (message.ByteSizeLong() < size) name += 'x';
  REQUIRE(message.ByteSizeLong() == size);
  return message;
}

TEST_CASE("a JSON line is a request") {
  const auto request =
      read("{\"subscribe\":{\"tags\":[\"cart-1\"],\"subjects\":[\"position\",\"health\"],\"rate_max_hz\":2}}\n");
  REQUIRE(request.has_value());
  CHECK(request->encoding == Encoding::json);
  CHECK(request->subscribe.tags(0) == "cart-1");
  CHECK(request->subscribe.subjects_size() == 2);
  CHECK(request->subscribe.rate_max_hz() == 2.0);
  CHECK(read("{\"subscribe\":{}}\r\n").has_value());
  CHECK(read("{ \"subscribe\" : { \"encoding\": \"delimited\" } }\n")->encoding == Encoding::delimited);
}

TEST_CASE("a delimited message is a request") {
  v1::ClientMessage message;
  message.mutable_subscribe()->add_tags("cart-1");
  const auto request = read(delimited(message));
  REQUIRE(request.has_value());
  CHECK(request->encoding == Encoding::delimited);
  CHECK(request->subscribe.tags(0) == "cart-1");
  message.mutable_subscribe()->set_encoding(v1::Encoding::json);
  CHECK(read(delimited(message))->encoding == Encoding::json);
  // The worked bytes of proto/README.md.
  CHECK(read(std::string("\x02\x0a\x00", 3)).has_value());
  const auto position = read(std::string("\x05\x0a\x03\x1a\x01\x00", 6));
  REQUIRE(position.has_value());
  REQUIRE(position->subscribe.subjects_size() == 1);
  CHECK(position->subscribe.subjects(0) == v1::Subject::position);
}

TEST_CASE("a length of 123 is told from an opening brace") {
  const std::string bytes = delimited(sized(123));
  REQUIRE(bytes[0] == '{');
  const auto request = read(bytes);
  REQUIRE(request.has_value());
  CHECK(request->encoding == Encoding::delimited);
}

TEST_CASE("a request is the same however it is cut") {
  const std::string lines[] = {"{\"subscribe\":{\"tags\":[\"cart-1\"]}}\n", delimited(sized(123)),
                               delimited(sized(4096)), std::string("\x02\x0a\x00", 3)};
  for (const std::string& line : lines) {
    for (std::size_t cut = 1; cut < std::min<std::size_t>(line.size(), 300); ++cut) {
      RequestReader reader;
      const auto first = reader.take(bytes_of(line.substr(0, cut)));
      REQUIRE(first.ok());
      REQUIRE_FALSE(first->has_value());
      const auto second = reader.take(bytes_of(line.substr(cut)));
      REQUIRE(second.ok());
      REQUIRE(second->has_value());
    }
    RequestReader reader;
    for (std::size_t i = 0; i < line.size(); ++i) {
      const auto request = reader.take(bytes_of(line.substr(i, 1)));
      REQUIRE(request.ok());
      REQUIRE(request->has_value() == (i + 1 == line.size()));
    }
  }
}

TEST_CASE("what is no request is refused with one line that says what would be") {
  CHECK(error_of("{\"subscribe\":{\"tagz\":[]}}\n") ==
        "the line is not a request: (subscribe) tagz: Cannot find field.; the simplest is {\"subscribe\":{}}");
  CHECK(error_of("{ }\n") == "the message is empty; a client begins with {\"subscribe\":{}}");
  CHECK(error_of(std::string("\x00", 1)) == "the message is empty; a client begins with {\"subscribe\":{}}");
  CHECK(error_of("GET / HTTP/1.1\r\n\r\n" + std::string(100, ' ')) ==
        "71 bytes after the length are not a ClientMessage (proto/feed.proto)");
  CHECK(error_of("\xff\xff\xff\xff\xff") ==
        "the first bytes are no length up to 4096, and no JSON line such as {\"subscribe\":{}}");
  CHECK(error_of("\x81\x20") == "a message of 4097 bytes is announced; the longest is 4096");
  CHECK(error_of("{\"" + std::string(4095, 'x')) == "the line is longer than 4096 bytes");
  CHECK(error_of("{\"" + std::string(100000, 'x') + "\n") == "the line is longer than 4096 bytes");
  CHECK(error_of("{\"subscribe\":{}}\n{\"subscribe\":{}}\n") ==
        "more bytes follow the request; a connection takes one, open another one to ask for something else");
  CHECK(error_of("{\"subscribe\":{\"encoding\":7}}\n") ==
        "subscribe.encoding 7 is unknown; there are same 0, json 1 and delimited 2");
  CHECK(error_of("{\"subscribe\":{\"tags\":3,\n").find('\n') == std::string::npos);

  RequestReader reader;
  REQUIRE(reader.take(bytes_of("{\"subscribe\":{}}\n")).ok());
  CHECK(reader.take({}).ok());
  CHECK(reader.take(bytes_of("x")).error() ==
        "a connection takes one request; open another one to ask for something else");
}

TEST_CASE("the longest line and message pass") {
  std::string line = "{\"subscribe\":{}";
  line += std::string(4096 - line.size() - 1, ' ') + "}\n";
  CHECK(read(line).has_value());
  CHECK(read(delimited(sized(4096))).has_value());
}

TEST_CASE("random bytes never do more than fail") {
  std::mt19937 random(20260101);
  int errors = 0;
  for (int run = 0; run < 20000; ++run) {
    std::string bytes(random() % 40, '\0');
    for (char& c : bytes) c = static_cast<char>(random());
    if (run % 2 == 0) bytes = "{\"subscribe\":{" + bytes + "}}\n";
    RequestReader reader;
    if (!reader.take(bytes_of(bytes)).ok()) ++errors;
  }
  CHECK(errors > 10000);
}

Request request_of(const v1::Subscribe& subscribe) { return {subscribe, Encoding::json}; }

TEST_CASE("a subscription to what is not there is refused") {
  const pipeline::Settings settings = feed_settings();
  const auto error = [&](const v1::Subscribe& subscribe) {
    const auto subscription = Subscription::make(request_of(subscribe), settings);
    REQUIRE_FALSE(subscription.ok());
    return subscription.error();
  };
  v1::Subscribe subscribe;
  subscribe.add_tags("cart-9\n");
  CHECK(error(subscribe) == "subscribe.tags: there is no tag \"cart-9\" at this site");
  subscribe.Clear();
  subscribe.add_subjects(static_cast<v1::Subject::Value>(9));
  CHECK(error(subscribe) == "subscribe.subjects: 9 is unknown; there are position 0, speed 1, health 2 and pulse 3");
  for (const double rate : {-1.0, 1e-4, 1001.0, std::numeric_limits<double>::quiet_NaN()}) {
    subscribe.Clear();
    subscribe.set_rate_max_hz(rate);
    CHECK(error(subscribe) ==
          fmt::format("subscribe.rate_max_hz {} is outside 0.001 to 1000; 0 asks for every message", rate));
  }
}

/// One message of each kind, from real reports.
std::vector<v1::Message> one_of_each() {
  const pipeline::Settings settings = feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  stream.publish(test::settled_report(0, 0));
  stream.publish(test::settled_report(1, 0));
  pipeline::TagHealthReport health;
  stream.publish(health);
  health.tag = 1;
  stream.publish(health);
  stream.publish(pipeline::AnchorHealthReport{});
  stream.publish(pipeline::StationHealthReport{});
  stream.publish(pipeline::PulseReport{});
  return messages.list;
}

/// Numbers of the messages that the subscription passes on.
std::vector<std::uint64_t> passed(const v1::Subscribe& subscribe, const std::vector<v1::Message>& messages) {
  const pipeline::Settings settings = feed_settings();
  auto subscription = Subscription::make(request_of(subscribe), settings);
  REQUIRE(subscription.ok());
  std::vector<std::uint64_t> numbers;
  for (const v1::Message& message : messages) {
    if (subscription->wants(message)) numbers.push_back(message.sequence());
  }
  return numbers;
}

TEST_CASE("filters by tag and subject") {
  const std::vector<v1::Message> messages = one_of_each();  // positions 1 and 3, speeds 2 and 4, health 5 to 8, pulse 9
  using Numbers = std::vector<std::uint64_t>;
  v1::Subscribe subscribe;
  CHECK(passed(subscribe, messages) == Numbers{1, 2, 3, 4, 5, 6, 7, 8, 9});
  subscribe.add_tags("cart-2");
  CHECK(passed(subscribe, messages) == Numbers{3, 4, 6, 7, 8, 9});
  subscribe.add_subjects(v1::Subject::position);
  CHECK(passed(subscribe, messages) == Numbers{3});
  subscribe.add_subjects(v1::Subject::health);
  CHECK(passed(subscribe, messages) == Numbers{3, 6, 7, 8});
  subscribe.clear_tags();
  subscribe.clear_subjects();
  subscribe.add_subjects(v1::Subject::pulse);
  subscribe.add_subjects(v1::Subject::speed);
  CHECK(passed(subscribe, messages) == Numbers{2, 4, 9});
}

/// Times of the positions of cart-1 that come through.
std::vector<TimeNs> times_passed(double rate_max_hz, const std::vector<TimeNs>& times) {
  const pipeline::Settings settings = feed_settings();
  v1::Subscribe subscribe;
  subscribe.set_rate_max_hz(rate_max_hz);
  auto subscription = Subscription::make(request_of(subscribe), settings);
  REQUIRE(subscription.ok());
  std::vector<TimeNs> out;
  for (const TimeNs time_ns : times) {
    v1::Message message;
    message.mutable_position()->set_tag("cart-1");
    message.mutable_position()->set_time_ns(time_ns);
    if (subscription->wants(message)) out.push_back(time_ns);
  }
  return out;
}

TEST_CASE("a rate thins in record time and keeps its mean") {
  std::vector<TimeNs> ticks;  // 100 s at 10 Hz with some jitter
  std::mt19937 random(7);
  for (int i = 0; i < 1000; ++i) ticks.push_back(i * 100 * ns_per_ms + static_cast<TimeNs>(random() % 2000000));
  CHECK(times_passed(0.0, ticks).size() == 1000);
  CHECK(times_passed(1000.0, ticks).size() == 1000);
  CHECK(times_passed(10.0, ticks).size() >= 998);
  for (const double rate_hz : {7.0, 3.0, 1.0, 0.1}) {
    INFO(rate_hz);
    const auto size = static_cast<double>(times_passed(rate_hz, ticks).size());
    CHECK(size <= 100 * rate_hz + 1);
    CHECK(size >= 100 * rate_hz - 2);
  }
}

TEST_CASE("silence saves up nothing") {
  std::vector<TimeNs> times = {0, 3600 * ns_per_s};
  for (int i = 1; i < 10; ++i) times.push_back(times[1] + i * 100 * ns_per_ms);
  // The first after the silence, one more that was due, then one a second.
  CHECK(times_passed(1.0, times).size() == 3);
}

TEST_CASE("each tag and kind is thinned by itself; health never is") {
  const pipeline::Settings settings = feed_settings();
  test::Messages messages;
  MessageStream stream(settings, messages);
  for (int tick = 0; tick < 20; ++tick) {
    stream.publish(test::settled_report(0, tick * 100 * ns_per_ms));
    stream.publish(test::settled_report(1, tick * 100 * ns_per_ms));
    pipeline::TagHealthReport health;
    health.time_ns = tick * 100 * ns_per_ms;
    stream.publish(health);
  }
  v1::Subscribe subscribe;
  subscribe.set_rate_max_hz(1.0);
  std::map<std::string, int> counts;
  for (const std::uint64_t number : passed(subscribe, messages.list)) {
    const v1::Message& message = messages.list.at(number - 1);
    if (message.has_position()) ++counts["position " + message.position().tag()];
    if (message.has_speed()) ++counts["speed " + message.speed().tag()];
    if (message.has_health()) ++counts["health"];
  }
  CHECK(counts ==
        std::map<std::string, int>{
            {"health", 20}, {"position cart-1", 2}, {"position cart-2", 2}, {"speed cart-1", 2}, {"speed cart-2", 2}});
}

TEST_CASE("times at the end of what fits do not overflow") {
  const TimeNs last = std::numeric_limits<TimeNs>::max();
  CHECK(times_passed(1.0, {last - 1, last}).size() == 2);
}

}  // namespace
}  // namespace kedge::feed
