#include "feed/outbox.h"

#include <google/protobuf/util/json_util.h>

#include <catch2/catch.hpp>
#include <list>
#include <random>

namespace kedge::feed {
namespace {

SharedBytes bytes_of(const std::string& text) { return std::make_shared<const std::string>(text); }

v1::Gap gap_in(const SharedBytes& bytes) {
  v1::Message message;
  REQUIRE(google::protobuf::util::JsonStringToMessage(*bytes, &message).ok());
  REQUIRE(message.has_gap());
  CHECK(message.sequence() == 0);
  return message.gap();
}

TEST_CASE("what fits passes through in order") {
  Outbox outbox({3, 100}, Encoding::json);
  CHECK(outbox.empty());
  CHECK(outbox.pop() == nullptr);
  const SharedBytes one = bytes_of("one");
  outbox.push(1, one);
  outbox.push(2, bytes_of("two"));
  CHECK_FALSE(outbox.empty());
  CHECK(outbox.bytes() == 6);
  CHECK(outbox.pop().get() == one.get());  // shared, not copied
  CHECK(*outbox.pop() == "two");
  CHECK(outbox.pop() == nullptr);
  CHECK(outbox.lost_total() == 0);
}

TEST_CASE("the oldest go when there are too many, and a Gap stands in their place") {
  Outbox outbox({2, 100}, Encoding::json);
  for (std::uint64_t sequence = 10; sequence < 15; ++sequence)
    outbox.push(sequence, bytes_of("m" + std::to_string(sequence)));
  const v1::Gap gap = gap_in(outbox.pop());
  CHECK(gap.messages_lost() == 3);
  CHECK(gap.first_sequence() == 10);
  CHECK(gap.last_sequence() == 12);
  CHECK(*outbox.pop() == "m13");
  CHECK(*outbox.pop() == "m14");
  CHECK(outbox.empty());
  CHECK(outbox.lost_total() == 3);
}

TEST_CASE("bytes are bounded too, and a message beyond them all is lost itself") {
  Outbox outbox({100, 10}, Encoding::delimited);
  outbox.push(1, bytes_of("12345"));
  outbox.push(2, bytes_of("12345"));
  outbox.push(3, bytes_of("1"));
  CHECK(outbox.bytes() == 6);
  outbox.push(4, bytes_of("12345678901"));
  CHECK(outbox.size() == 0);
  CHECK_FALSE(outbox.empty());
  v1::Message message;
  message.mutable_gap()->set_messages_lost(4);
  message.mutable_gap()->set_first_sequence(1);
  message.mutable_gap()->set_last_sequence(4);
  CHECK(*outbox.pop() == encode(message, Encoding::delimited));
  CHECK(outbox.empty());
}

/// The same promises kept in the plainest way: a list of what waits, one of what was lost.
struct Model {
  OutboxLimits limits;
  std::list<std::pair<std::uint64_t, std::size_t>> waiting;
  std::vector<std::uint64_t> lost;

  void push(std::uint64_t sequence, std::size_t size) {
    waiting.emplace_back(sequence, size);
    while (waiting.size() > limits.messages_max || total() > limits.bytes_max) {
      lost.push_back(waiting.front().first);
      waiting.pop_front();
    }
  }
  [[nodiscard]] std::size_t total() const {
    std::size_t sum = 0;
    for (const auto& [sequence, size] : waiting) sum += size;
    return sum;
  }
};

TEST_CASE("random pushes and pops keep bounds, order and an exact account") {
  std::vector<std::uint32_t> failed;
  for (std::uint32_t seed = 1; seed <= 200; ++seed) {
    std::mt19937 random(seed);
    const OutboxLimits limits{1 + random() % 20, 1 + random() % 400};
    Outbox outbox(limits, Encoding::json);
    Model model{limits, {}, {}};
    INFO("seed " << seed << ", at most " << limits.messages_max << " messages and " << limits.bytes_max << " bytes");
    std::uint64_t sequence = 0;
    std::uint64_t delivered = 0;
    std::uint64_t reported_lost = 0;
    bool good = true;
    for (int step = 0; step < 2000; ++step) {
      if (random() % 3 != 0) {
        sequence += 1 + random() % 3;  // numbers that other subscribers got alone
        const std::size_t size = random() % 60;
        outbox.push(sequence, bytes_of(std::to_string(sequence) + std::string(size, '.')));
        model.push(sequence, std::to_string(sequence).size() + size);
      } else {
        const SharedBytes bytes = outbox.pop();
        if (!model.lost.empty()) {
          const v1::Gap gap = gap_in(bytes);
          good = good && gap.messages_lost() == model.lost.size() && gap.first_sequence() == model.lost.front() &&
                 gap.last_sequence() == model.lost.back();
          reported_lost += gap.messages_lost();
          model.lost.clear();
        } else if (model.waiting.empty()) {
          good = good && bytes == nullptr;
        } else {
          good = good && bytes != nullptr && std::stoull(*bytes) == model.waiting.front().first;
          model.waiting.pop_front();
          ++delivered;
        }
      }
      good = good && outbox.size() == model.waiting.size() && outbox.bytes() == model.total() &&
             outbox.size() <= limits.messages_max && outbox.bytes() <= limits.bytes_max &&
             outbox.lost_total() == reported_lost + model.lost.size();
    }
    if (!good || delivered == 0) failed.push_back(seed);
  }
  CHECK(failed == std::vector<std::uint32_t>{});
}

}  // namespace
}  // namespace kedge::feed
