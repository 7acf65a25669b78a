#include <catch2/catch.hpp>
#include <sstream>

#include "scoring/collector.h"
#include "scoring/messages.h"

using namespace kedge;
using namespace kedge::scoring;

TEST_CASE("positions and speeds of one instant make a sample") {
  std::istringstream in(
      R"({"sequence":"1","position":{"tag":"cart-1","time_ns":"1500000000","standing":"twofold","east_m":1,"north_m":2,)"
      R"("covariance_m2":[4,1,0,9,0,1],"probability":0.6}})"
      "\n"
      R"({"sequence":"2","speed":{"tag":"cart-1","time_ns":"1500000000","speed_mps":1.25}})"
      "\n"
      R"({"sequence":"3","position":{"tag":"cart-2","time_ns":"1500000000","standing":"ring","ring_radius_m":4}})"
      "\n"
      R"({"sequence":"4","speed":{"tag":"cart-2","time_ns":"1600000000","speed_mps":3}})"
      "\n"
      R"({"sequence":"5","pulse":{"time_ns":"1"}})"
      "\n");
  Collector collector;
  const MessagesRead read = read_messages(in, "feed.jsonl", [&](const feed::v1::Message& m) { collector.take(m); });
  CHECK(read.messages == 5);
  CHECK(read.lines_dropped == 0);
  const Sample& first = collector.samples().at("cart-1").at(0);
  CHECK(first.t_s == Approx(1.5));
  CHECK(first.standing == feed::v1::Standing::twofold);
  CHECK(first.position_m->isApprox(Vector2(1, 2)));
  Matrix2 covariance_m2;
  covariance_m2 << 4, 1, 1, 9;
  CHECK(first.covariance_m2.isApprox(covariance_m2));
  CHECK(first.probability == 0.6);
  CHECK(first.speed_mps == 1.25);
  const Sample& second = collector.samples().at("cart-2").at(0);
  CHECK_FALSE(second.position_m);
  CHECK_FALSE(second.speed_mps);  // that speed is of another instant
}

TEST_CASE("lines that are no message are passed over, counted and said") {
  const std::string good = R"({"sequence":"1","pulse":{"time_ns":"1"}})";
  std::istringstream in(good + "\nnonsense\n{}\n" + std::string(line_bytes_max + 10, 'x') + "\n\n" + good + "\n" +
                        good.substr(0, 20));
  int taken = 0;
  const MessagesRead read = read_messages(in, "feed.jsonl", [&](const feed::v1::Message&) { ++taken; });
  CHECK(taken == 2);
  CHECK(read.messages == 2);
  CHECK(read.lines_dropped == 4);
  CHECK_THAT(read.first_drop, Catch::StartsWith("feed.jsonl:2: no message: "));
}

TEST_CASE("a position that is no number is no position") {
  std::istringstream in(R"({"position":{"tag":"a","time_ns":"1","east_m":"NaN","north_m":"Infinity"}})");
  Collector collector;
  CHECK(read_messages(in, "f", [&](const feed::v1::Message& m) { collector.take(m); }).messages == 1);
  CHECK_FALSE(collector.samples().at("a").at(0).position_m);
}
