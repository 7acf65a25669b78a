#include "feed/distributor.h"

#include <google/protobuf/util/json_util.h>

#include <catch2/catch.hpp>
#include <sstream>

#include "feed/greeting.h"
#include "support/feed_settings.h"

namespace kedge::feed {
namespace {

using test::feed_settings;
using test::settled_report;

/// The messages in what a subscriber has waiting.
std::vector<v1::Message> drain(Subscriber& subscriber) {
  std::vector<v1::Message> messages;
  while (const SharedBytes bytes = subscriber.next()) {
    std::istringstream lines(*bytes);
    for (std::string line; std::getline(lines, line);) {
      REQUIRE(google::protobuf::util::JsonStringToMessage(line, &messages.emplace_back()).ok());
    }
  }
  return messages;
}

struct Station {
  pipeline::Settings settings = feed_settings();
  Distributor distributor;
  MessageStream stream{settings, distributor};

  explicit Station(OutboxLimits limits = {}) : distributor(settings, "0.1.0", limits) {}

  std::shared_ptr<Subscriber> subscribe(
      const v1::Subscribe& subscribe = {}, std::function<void()> on_ready = [] {}) {
    auto subscriber = distributor.subscribe({subscribe, Encoding::json}, std::move(on_ready));
    REQUIRE(subscriber.ok());
    return *subscriber;
  }
};

TEST_CASE("a subscriber is greeted with the station, its tags and the caution") {
  Station station;
  station.stream.publish(pipeline::PulseReport{});
  const auto messages = drain(*station.subscribe());
  REQUIRE(messages.size() == 1);
  CHECK(messages[0].sequence() == 0);
  const v1::Greeting& greeting = messages[0].greeting();
  CHECK(greeting.program() == "kedged");
  CHECK(greeting.version() == "0.1.0");
  CHECK(greeting.site() == "nursery");
  CHECK(std::vector<std::string>(greeting.tags().begin(), greeting.tags().end()) ==
        std::vector<std::string>{"cart-1", "cart-2", "flyer-1"});
  CHECK(std::vector<std::string>(greeting.anchors().begin(), greeting.anchors().end()) ==
        std::vector<std::string>{"mast"});
  CHECK(greeting.caution() == std::string(caution()));
  CHECK(greeting.after_sequence() == 1);
}

TEST_CASE("the snapshot holds the newest of everything that was asked for, in order") {
  Station station;
  for (int second = 0; second < 3; ++second) {
    station.stream.publish(settled_report(0, second * ns_per_s));
    station.stream.publish(settled_report(1, second * ns_per_s));
    station.stream.publish(pipeline::TagHealthReport{});
    station.stream.publish(pipeline::AnchorHealthReport{});
    station.stream.publish(pipeline::StationHealthReport{});
    station.stream.publish(pipeline::PulseReport{});
  }
  const auto numbers = [](const std::vector<v1::Message>& messages) {
    std::vector<std::uint64_t> list;
    for (const v1::Message& message : messages) list.push_back(message.sequence());
    return list;
  };
  // Eight messages a second; the last second's, but for the pulse.
  CHECK(numbers(drain(*station.subscribe())) == std::vector<std::uint64_t>{0, 17, 18, 19, 20, 21, 22, 23});
  v1::Subscribe subscribe;
  subscribe.add_tags("cart-2");
  subscribe.add_subjects(v1::Subject::speed);
  const auto subscriber = station.subscribe(subscribe);
  CHECK(numbers(drain(*subscriber)) == std::vector<std::uint64_t>{0, 20});
  station.stream.publish(settled_report(1, 3 * ns_per_s));
  CHECK(numbers(drain(*subscriber)) == std::vector<std::uint64_t>{26});
}

TEST_CASE("a subscriber is woken once, when something comes to an empty box") {
  Station station;
  int woken = 0;
  const auto subscriber = station.subscribe({}, [&] { ++woken; });
  station.stream.publish(pipeline::PulseReport{});
  CHECK(woken == 0);  // the opening waits still
  CHECK(drain(*subscriber).size() == 2);
  station.stream.publish(pipeline::PulseReport{});
  station.stream.publish(pipeline::PulseReport{});
  CHECK(woken == 1);
  CHECK(drain(*subscriber).size() == 2);
  station.stream.publish(pipeline::PulseReport{});
  CHECK(woken == 2);
}

TEST_CASE("one slow subscriber loses its own messages, and no one else's") {
  Station station({10, 1 << 16});
  const auto slow = station.subscribe();
  const auto quick = station.subscribe();
  std::size_t received = drain(*quick).size();
  for (int i = 0; i < 100; ++i) {
    station.stream.publish(pipeline::PulseReport{i});
    received += drain(*quick).size();
  }
  CHECK(received == 101);
  const auto messages = drain(*slow);
  REQUIRE(messages.size() == 12);
  CHECK(messages[0].has_greeting());  // never dropped
  CHECK(messages[1].gap().messages_lost() == 90);
  CHECK(messages[1].gap().first_sequence() == 1);
  CHECK(messages[1].gap().last_sequence() == 90);
  CHECK(messages[2].sequence() == 91);
  CHECK(messages[11].sequence() == 100);
  CHECK(station.distributor.messages_lost() == 90);
}

TEST_CASE("a subscription ends with its pointer, even from within its own call") {
  Station station;
  std::shared_ptr<Subscriber> leaving;
  leaving = station.subscribe({}, [&] { leaving.reset(); });
  const auto staying = station.subscribe();
  drain(*leaving);
  drain(*staying);
  CHECK(station.distributor.subscribers() == 2);
  station.stream.publish(pipeline::PulseReport{});
  CHECK(leaving == nullptr);
  CHECK(station.distributor.subscribers() == 1);
  station.stream.publish(pipeline::PulseReport{});
  CHECK(drain(*staying).size() == 2);
}

TEST_CASE("a subscription that is refused leaves nothing behind") {
  Station station;
  v1::Subscribe subscribe;
  subscribe.add_tags("cart-9");
  const auto refused = station.distributor.subscribe({subscribe, Encoding::json}, [] {});
  CHECK(refused.error() == "subscribe.tags: there is no tag \"cart-9\" at this site");
  CHECK(station.distributor.subscribers() == 0);
}

TEST_CASE("the bytes of a message are the same for all, and not copied") {
  Station station;
  const auto one = station.subscribe();
  const auto two = station.subscribe();
  drain(*one);
  drain(*two);
  station.stream.publish(settled_report(0, 0));
  CHECK(one->next().get() == two->next().get());
}

// The words of the project's own rule on cautions; the sentence breaks are ours.
TEST_CASE("the caution says all that it must") {
  for (const char* part :
       {"estimates that can be wrong without warning", "not for collision avoidance, personnel protection",
        "any safety function", "local codes and licensed practice", "local privacy law"}) {
    CHECK(caution().find(part) != std::string_view::npos);
  }
}

}  // namespace
}  // namespace kedge::feed
