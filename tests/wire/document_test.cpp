// The document for encoder writers stays true: its example and its sizes are those of the encoder.
#include <fmt/core.h>

#include <catch2/catch.hpp>
#include <fstream>
#include <sstream>

#include "support/bytes.h"
#include "wire/cobs.h"
#include "wire/encode.h"

using namespace kedge;
using namespace kedge::wire;

namespace {

/// Words parted by single spaces, so that line breaks do not matter.
std::string document() {
  std::ifstream file(KEDGE_SOURCE_DIR "/proto/README.md");
  std::string text;
  for (std::string word; file >> word;) text += word + " ";
  REQUIRE(text.size() > 1000);
  return text;
}

bool has(const std::string& text, const std::string& part) {
  INFO("proto/README.md should hold: " << part);
  CHECK(text.find(part) != std::string::npos);
  return text.find(part) != std::string::npos;
}

Packet example() {
  Packet packet;
  packet.device_id = 7;
  packet.sequence = 1;
  packet.device_time_us = 1'000'000;
  Range range;
  range.tag_device_id = 7;
  range.anchor_id = 1;
  range.range_m = 12.5;
  range.sigma_m = 0.125;
  packet.body = range;
  return packet;
}

/// Device number and counters as they are after some hours.
packets::v1::Packet typical() {
  packets::v1::Packet packet;
  packet.set_device_id(1021);
  packet.set_sequence(1'000'000);
  packet.set_device_time_us(20'000'000'000);
  return packet;
}

packets::v1::Packet typical_inertial(int samples, int fields, bool rest) {
  auto packet = typical();
  auto& body = *packet.mutable_inertial();
  body.set_sample_interval_us(10'000);
  for (int i = 0; i < 3 * samples; ++i) {
    body.add_specific_force_mps2(1.0F);
    body.add_angular_rate_radps(1.0F);
  }
  for (int i = 0; i < 3 * fields; ++i) body.add_magnetic_field_ut(1.0F);
  if (rest) {
    body.set_pressure_pa(101325.0F);
    body.set_temperature_degc(20.0F);
    body.set_battery_v(3.7F);
  }
  return packet;
}

packets::v1::Range& typical_range(packets::v1::Packet& packet) {
  packet.mutable_range()->set_anchor_id(1);
  packet.mutable_range()->set_received_power_dbm(-80.0F);
  packet.mutable_range()->set_first_path_power_dbm(-82.0F);
  return *packet.mutable_range();
}

template <class Exchange>
void stamp(Exchange& exchange) {
  exchange.set_poll_tx(1);
  exchange.set_poll_rx(1);
  exchange.set_reply_tx(1);
  exchange.set_reply_rx(1);
}

void check_row(const std::string& text, const std::string& name, const packets::v1::Packet& packet) {
  packets::v1::Datagram datagram;
  *datagram.add_packets() = packet;
  const auto bytes = encode(datagram);
  // The longest a frame of that size can be; zeros make it no longer.
  const std::size_t framed = cobs_encoded_max(bytes.size() + 4) + 1;
  has(text, fmt::format("| {} | {} | {} |", name, bytes.size(), framed));
}

}  // namespace

TEST_CASE("the worked example is what the encoder makes") {
  const std::string text = document();
  const auto datagram = encode(example());
  has(text, test::to_hex(datagram));
  has(text, test::to_hex(frame(datagram)));
}

TEST_CASE("the sizes are what the encoder makes") {
  const std::string text = document();
  check_row(text, "inertial, 1 sample", typical_inertial(1, 0, false));
  check_row(text, "inertial, 10 samples, 1 field", typical_inertial(10, 1, false));
  check_row(text, "inertial, 10 samples, 10 fields, pressure, temperature, battery", typical_inertial(10, 10, true));
  check_row(text, "inertial, 32 samples, 32 fields, pressure, temperature, battery", typical_inertial(32, 32, true));

  auto distance = typical();
  typical_range(distance).mutable_distance()->set_distance_m(12.5F);
  distance.mutable_range()->mutable_distance()->set_sigma_m(0.1F);
  check_row(text, "range, distance and sigma, both powers", distance);

  auto two_way = typical();
  auto& form = *typical_range(two_way).mutable_two_way();
  form.set_counter_bits(40);
  stamp(*form.mutable_single_sided());
  form.mutable_single_sided()->set_clock_offset_ppm(1.0F);
  check_row(text, "range, single-sided with clock offset, both powers", two_way);
  stamp(*form.mutable_double_sided());
  form.mutable_double_sided()->set_final_tx(1);
  form.mutable_double_sided()->set_final_rx(1);
  check_row(text, "range, double-sided, both powers", two_way);
  stamp(*form.mutable_second_reply());
  form.mutable_second_reply()->set_second_reply_tx(1);
  form.mutable_second_reply()->set_second_reply_rx(1);
  check_row(text, "range, second reply, both powers", two_way);

  auto travel = typical();
  travel.mutable_travel()->set_interval_us(50'000);
  travel.mutable_travel()->set_distance_m(0.1F);
  travel.mutable_travel()->set_turn_rad(0.1F);
  check_row(text, "travel", travel);
}
