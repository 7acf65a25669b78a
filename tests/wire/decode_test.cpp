#include "wire/decode.h"

#include <catch2/catch.hpp>
#include <cmath>
#include <functional>
#include <limits>
#include <random>
#include <vector>

#include "core/physics.h"
#include "support/bytes.h"
#include "wire/encode.h"
#include "wire/limits.h"

using namespace kedge;
using namespace kedge::wire;

namespace {

struct Heard : PacketSink {
  struct Refused {
    DeviceId device_id;
    RefusalCode code;
    std::string text;
  };
  std::vector<Packet> packets;
  std::vector<Refused> refusals;
  std::string order;  ///< p and r

  void packet(const Packet& packet) override {
    packets.push_back(packet);
    order += 'p';
  }
  void refused(const Refusal& refusal) override {
    refusals.push_back({refusal.device_id, refusal.code, std::string(refusal.text)});
    order += 'r';
  }
};

void decode(std::span<const std::byte> bytes, Heard& heard) {
  static Decoder decoder(propagation_speed_mps_default);  // one for all: it must keep nothing
  decoder.decode(bytes, heard);
}

packets::v1::Packet inertial(int samples) {
  packets::v1::Packet packet;
  packet.set_device_id(7);
  packet.set_sequence(9);
  packet.set_device_time_us(123'456'789);
  auto& body = *packet.mutable_inertial();
  body.set_sample_interval_us(10'000);
  for (int i = 0; i < samples; ++i) {
    for (const float value : {0.1F, -0.2F, 9.8F}) body.add_specific_force_mps2(value);
    for (const float value : {0.01F, 0.02F, 0.25F}) body.add_angular_rate_radps(value);
  }
  return packet;
}

packets::v1::Packet range(float distance_m) {
  packets::v1::Packet packet;
  packet.set_device_id(7);
  packet.mutable_range()->set_anchor_id(3);
  packet.mutable_range()->mutable_distance()->set_distance_m(distance_m);
  return packet;
}

packets::v1::Packet travel() {
  packets::v1::Packet packet;
  packet.set_device_id(7);
  packet.mutable_travel()->set_interval_us(50'000);
  packet.mutable_travel()->set_distance_m(0.05F);
  return packet;
}

std::vector<std::byte> bytes_of(std::initializer_list<packets::v1::Packet> packets) {
  packets::v1::Datagram datagram;
  for (const auto& packet : packets) *datagram.add_packets() = packet;
  return encode(datagram);
}

/// The one refusal that this packet earns.
Heard::Refused refusal(const packets::v1::Packet& packet) {
  Heard heard;
  decode(bytes_of({packet}), heard);
  REQUIRE(heard.packets.empty());
  REQUIRE(heard.refusals.size() == 1);
  return heard.refusals.front();
}

}  // namespace

TEST_CASE("what was encoded is decoded") {
  Packet sent;
  sent.device_id = 0xFFFFFFFF;
  sent.sequence = 0xFFFFFFFE;
  sent.device_time_us = 0xFFFFFFFFFFFFFFFF;

  SECTION("inertial") {
    const int fields = GENERATE(0, 1, 32);
    InertialBatch batch;
    batch.sample_interval_us = 5000;
    batch.count = 32;
    for (int i = 0; i < 32; ++i) {
      auto& sample = batch.samples[static_cast<std::size_t>(i)];
      sample.specific_force_mps2 = {0.5 * i, -1.0, 9.5};
      sample.angular_rate_radps = {0.25, 0.125 * i, -0.5};
      sample.has_field = i >= 32 - fields;
      if (sample.has_field) sample.magnetic_field_ut = {20.0, -0.5 * i, 40.0};
    }
    batch.pressure_pa = 101325.0;
    batch.temperature_degc = -12.5;
    batch.battery_v = 3.75;
    sent.body = batch;
    Heard heard;
    decode(encode(sent), heard);
    REQUIRE(heard.order == "p");
    const Packet& got = heard.packets.front();
    CHECK(got.device_id == sent.device_id);
    CHECK(got.sequence == sent.sequence);
    CHECK(got.device_time_us == sent.device_time_us);
    const auto& body = std::get<InertialBatch>(got.body);
    CHECK(body.sample_interval_us == 5000);
    REQUIRE(body.count == 32);
    for (std::size_t i = 0; i < 32; ++i) {
      CHECK(body.samples[i].specific_force_mps2 == batch.samples[i].specific_force_mps2);
      CHECK(body.samples[i].angular_rate_radps == batch.samples[i].angular_rate_radps);
      CHECK(body.samples[i].has_field == batch.samples[i].has_field);
      CHECK(body.samples[i].magnetic_field_ut == batch.samples[i].magnetic_field_ut);
    }
    CHECK(body.pressure_pa == 101325.0);
    CHECK(body.temperature_degc == -12.5);
    CHECK(body.battery_v == 3.75);
  }
  SECTION("range of another tag") {
    sent.body = Range{.tag_device_id = 12,
                      .anchor_id = 3,
                      .range_m = 41.5,
                      .sigma_m = 0.125,
                      .received_power_dbm = -80.5,
                      .first_path_power_dbm = -82.25};
    Heard heard;
    decode(encode(sent), heard);
    REQUIRE(heard.order == "p");
    const auto& body = std::get<Range>(heard.packets.front().body);
    CHECK(body.tag_device_id == 12);
    CHECK(body.anchor_id == 3);
    CHECK(body.range_m == 41.5);
    CHECK(body.sigma_m == 0.125);
    CHECK(body.received_power_dbm == -80.5);
    CHECK(body.first_path_power_dbm == -82.25);
  }
  SECTION("own range: the sender is the tag") {
    Range own;
    own.tag_device_id = sent.device_id;
    own.range_m = -0.25;
    sent.body = own;
    Heard heard;
    decode(encode(sent), heard);
    REQUIRE(heard.order == "p");
    CHECK(std::get<Range>(heard.packets.front().body).tag_device_id == sent.device_id);
    CHECK_FALSE(std::get<Range>(heard.packets.front().body).sigma_m.has_value());
  }
  SECTION("travel") {
    sent.body = Travel{.interval_us = 20'000, .distance_m = -0.5, .turn_rad = {}};
    Heard heard;
    decode(encode(sent), heard);
    REQUIRE(heard.order == "p");
    CHECK(std::get<Travel>(heard.packets.front().body).interval_us == 20'000);
    CHECK(std::get<Travel>(heard.packets.front().body).distance_m == -0.5);
    CHECK_FALSE(std::get<Travel>(heard.packets.front().body).turn_rad.has_value());
  }
}

TEST_CASE("two-way counters become metres") {
  auto packet = range(0.0F);
  auto& two_way = *packet.mutable_range()->mutable_two_way();
  two_way.set_counter_bits(32);
  auto& stamps = *two_way.mutable_single_sided();
  stamps.set_poll_tx(0xFFFFFF00);
  stamps.set_poll_rx(5000);
  stamps.set_reply_tx(5000 + 19'000'000);
  stamps.set_reply_rx((0xFFFFFF00ULL + 19'000'000 + 8000) & 0xFFFFFFFF);
  Heard heard;
  decode(bytes_of({packet}), heard);
  REQUIRE(heard.order == "p");
  // 4000 ticks of 4.6903544 mm in air.
  CHECK(std::get<Range>(heard.packets.front().body).range_m ==
        Approx(4000 * 299702547.0 / (128 * 499.2e6)).epsilon(1e-12));
}

TEST_CASE("one bad packet takes no other with it") {
  // Each of these ranges takes 15 bytes, two of them for the datagram's own field.
  auto broken = bytes_of({range(1.0F)});
  // The length of the distance, which now runs beyond the packet.
  broken[broken.size() - 6] = std::byte{0x7F};
  auto bytes = bytes_of({range(1.0F), range(99'999.0F)});
  bytes.insert(bytes.end(), broken.begin(), broken.end());
  const auto last = bytes_of({travel(), inertial(1)});
  bytes.insert(bytes.end(), last.begin(), last.end());
  Heard heard;
  decode(bytes, heard);
  CHECK(heard.order == "prrpp");
  CHECK(heard.refusals[0].code == RefusalCode::implausible);
  CHECK(heard.refusals[0].device_id == 7);
  CHECK(heard.refusals[0].text == "range: distance_m 99999 is not within -5 to 10000 m; is it in mm or cm?");
  CHECK(heard.refusals[1].code == RefusalCode::malformed);
  CHECK(heard.refusals[1].text == "packet of 13 bytes at byte 32 of the datagram cannot be read");
}

TEST_CASE("malformed packets say what would be right") {
  const auto text_of = [](packets::v1::Packet packet, const std::function<void(packets::v1::Packet&)>& change) {
    change(packet);
    const auto refused = refusal(packet);
    CHECK(refused.code == RefusalCode::malformed);
    return refused.text;
  };
  using P = packets::v1::Packet;
  CHECK(text_of(range(1), [](P& p) { p.set_device_id(0); }) == "device_id is 0 or missing");
  CHECK(text_of(range(1), [](P& p) { p.clear_body(); }) == "no inertial, range or travel in it");
  CHECK(text_of(range(1), [](P& p) { p.mutable_range()->clear_measured(); }) == "range: neither distance nor two_way");
  CHECK(text_of(range(1), [](P& p) { p.mutable_range()->mutable_two_way()->set_counter_bits(40); }) ==
        "range: two_way holds no single_sided, double_sided or second_reply");
  CHECK(text_of(range(1), [](P& p) { p.mutable_range()->set_tag_device_id(0); }) ==
        "range: tag_device_id is 0; leave it out where the sender is the tag");
  CHECK(text_of(travel(), [](P& p) { p.mutable_travel()->clear_distance_m(); }) ==
        "travel: neither distance_m nor turn_rad");
  CHECK(text_of(inertial(0), [](P&) {}) ==
        "inertial: specific_force_mps2 holds 0 numbers, not x, y, z of 1 to 32 samples");
  CHECK(text_of(inertial(33), [](P&) {}) ==
        "inertial: specific_force_mps2 holds 99 numbers, not x, y, z of 1 to 32 samples");
  CHECK(text_of(inertial(2), [](P& p) { p.mutable_inertial()->add_specific_force_mps2(1); }) ==
        "inertial: specific_force_mps2 holds 7 numbers, not x, y, z of 1 to 32 samples");
  CHECK(text_of(inertial(2), [](P& p) { p.mutable_inertial()->clear_angular_rate_radps(); }) ==
        "inertial: angular_rate_radps holds 0 numbers, not 6 as specific_force_mps2");
  CHECK(text_of(inertial(2), [](P& p) { p.mutable_inertial()->add_magnetic_field_ut(1); }) ==
        "inertial: magnetic_field_ut holds 1 numbers, not 0, 3 or 6 as specific_force_mps2");
}

TEST_CASE("implausible figures are named with unit and likely cause") {
  const auto text_of = [](packets::v1::Packet packet, const std::function<void(packets::v1::Packet&)>& change) {
    change(packet);
    const auto refused = refusal(packet);
    CHECK(refused.code == RefusalCode::implausible);
    CHECK(refused.device_id == 7);
    return refused.text;
  };
  using P = packets::v1::Packet;
  const float nan = std::numeric_limits<float>::quiet_NaN();
  CHECK(text_of(inertial(3), [](P& p) { p.mutable_inertial()->set_specific_force_mps2(5, 2048.0F); }) ==
        "inertial: specific_force_mps2 (0.1, -0.2, 2048) of sample 2 is longer than 400 m/s2; is it in raw counts or "
        "mg?");
  CHECK(text_of(inertial(3), [](P& p) { p.mutable_inertial()->set_angular_rate_radps(2, 90.0F); }) ==
        "inertial: angular_rate_radps (0.01, 0.02, 90) of sample 1 is longer than 70 rad/s; is it in deg/s?");
  CHECK(text_of(inertial(1), [&](P& p) { p.mutable_inertial()->set_angular_rate_radps(0, nan); }) ==
        "inertial: angular_rate_radps (nan, 0.02, 0.25) of sample 1 is longer than 70 rad/s; is it in deg/s?");
  CHECK(text_of(inertial(1), [](P& p) {
          for (const float value : {0.0F, 20'000.0F, -40'000.0F}) p.mutable_inertial()->add_magnetic_field_ut(value);
        }) == "inertial: magnetic_field_ut (0, 20000, -40000) of sample 1 is longer than 2000 uT; is it in nT or mG?");
  CHECK(text_of(inertial(1), [](P& p) { p.mutable_inertial()->set_pressure_pa(1013.25F); }) ==
        "inertial: pressure_pa 1013.25 is not within 30000 to 120000 Pa; is it in hPa or kPa?");
  CHECK(text_of(inertial(1), [](P& p) { p.mutable_inertial()->set_temperature_degc(293.0F); }) ==
        "inertial: temperature_degc 293 is not within -100 to 200 degC; is it in kelvin?");
  CHECK(text_of(inertial(1), [](P& p) { p.mutable_inertial()->set_battery_v(3700.0F); }) ==
        "inertial: battery_v 3700 is not within 0 to 1000 V; is it in mV?");
  CHECK(text_of(inertial(2), [](P& p) { p.mutable_inertial()->set_sample_interval_us(0); }) ==
        "inertial: sample_interval_us 0 is not within 1 to 1e+06 us; is it in ms or ns?");
  CHECK(text_of(range(1), [&](P& p) { p.mutable_range()->mutable_distance()->set_sigma_m(nan); }) ==
        "range: sigma_m nan is not within 0.0001 to 1000 m; leave it out where it is not known");
  CHECK(text_of(range(1), [](P& p) { p.mutable_range()->set_received_power_dbm(80.0F); }) ==
        "range: received_power_dbm 80 is not within -200 to 50 dBm");
  CHECK(text_of(travel(), [](P& p) { p.mutable_travel()->set_interval_us(0); }) ==
        "travel: interval_us 0 is not within 1 to 6e+07 us; is it in ms or ns?");
  CHECK(text_of(range(1), [](P& p) { p.mutable_range()->mutable_two_way()->mutable_single_sided(); }) ==
        "range: two_way: counter_bits 0 is not within 16 to 64");
}

TEST_CASE("a sensor that reports in g is found at rest, free fall and vibration are not") {
  const auto batch = [](int samples, const std::function<float(int)>& force) {
    auto packet = inertial(samples);
    for (int i = 0; i < samples; ++i) {
      for (int axis = 0; axis < 3; ++axis) {
        packet.mutable_inertial()->set_specific_force_mps2(3 * i + axis, axis == 2 ? force(i) : 0.0F);
        packet.mutable_inertial()->set_angular_rate_radps(3 * i + axis, 0.01F);
      }
    }
    return packet;
  };
  CHECK(
      refusal(batch(8, [](int i) { return i % 2 == 0 ? 1.01F : 0.99F; })).text ==
      "inertial: specific_force_mps2 (0.000, 0.000, 1.010) keeps a length of 1.0 m/s2 at rest, where 9.8 is right; is "
      "it in g?");
  Heard heard;
  decode(bytes_of({batch(8, [](int) { return 0.1F; }),                                   // free fall
                   batch(8, [](int i) { return i % 2 == 0 ? 1.5F : 0.5F; }),             // vibration
                   batch(8, [](int i) { return 9.8F - 1.1F * static_cast<float>(i); }),  // passing through
                   batch(3, [](int) { return 1.0F; })}),                                 // too short to tell
         heard);
  CHECK(heard.order == "pppp");
}

TEST_CASE("sizes are bounded") {
  Heard heard;
  decode(std::vector<std::byte>(datagram_bytes_max + 1), heard);
  REQUIRE(heard.order == "r");
  CHECK(heard.refusals[0].text == "datagram is longer than 2048 bytes; send fewer packets in each");

  packets::v1::Datagram many;
  for (int i = 0; i < 70; ++i) *many.add_packets() = range(1.0F);
  Heard some;
  decode(encode(many), some);
  CHECK(some.packets.size() == packets_per_datagram_max);
  REQUIRE(some.refusals.size() == 1);
  CHECK(some.refusals[0].text == "datagram of 70 packets: the first 64 were taken");

  Heard nothing;
  decode({}, nothing);
  REQUIRE(nothing.refusals.size() == 1);
  CHECK(nothing.refusals[0].text == "datagram is empty");
}

TEST_CASE("unknown fields are passed over: room for what comes later") {
  auto bytes = test::from_hex("12 03 01 02 03 18 05");  // reserved fields 2 and 3
  const auto packet = bytes_of({range(2.0F)});
  bytes.insert(bytes.end(), packet.begin(), packet.end());
  Heard heard;
  decode(bytes, heard);
  CHECK(heard.order == "p");
}

TEST_CASE("a datagram cut anywhere keeps the packets before the cut") {
  const auto bytes = bytes_of({range(1.0F), inertial(4), travel()});
  const std::size_t first = bytes_of({range(1.0F)}).size();
  const std::size_t second = first + bytes_of({inertial(4)}).size();
  for (std::size_t size = 1; size < bytes.size(); ++size) {
    Heard heard;
    decode(std::span(bytes).first(size), heard);
    INFO("cut at " << size);
    REQUIRE(heard.packets.size() == (size < first ? 0U : size < second ? 1U : 2U));
    REQUIRE(heard.refusals.size() == (size == first || size == second ? 0U : 1U));
  }
}

TEST_CASE("flipped bits never get past the door as something impossible") {
  const auto bytes = bytes_of({range(1.0F), inertial(4), travel()});
  for (std::size_t at = 0; at < bytes.size(); ++at) {
    for (unsigned bit = 0; bit < 8; ++bit) {
      auto flipped = bytes;
      flipped[at] ^= static_cast<std::byte>(1U << bit);
      Heard heard;
      decode(flipped, heard);
      REQUIRE(heard.packets.size() + heard.refusals.size() >= 1);
      for (const Packet& packet : heard.packets) {
        REQUIRE(packet.device_id != 0);
        if (const auto* batch = std::get_if<InertialBatch>(&packet.body)) {
          REQUIRE(batch->count >= 1);
          REQUIRE(batch->count <= samples_per_packet_max);
          for (std::size_t i = 0; i < batch->count; ++i) {
            REQUIRE(batch->samples[i].specific_force_mps2.norm() <= 400.0);
            REQUIRE(batch->samples[i].angular_rate_radps.norm() <= 70.0);
          }
        }
      }
    }
  }
}
