// Datagrams that reach the station: the same for the same seed, readable at the door, as late, lost,
// repeated and overtaken as asked for.
#include <algorithm>
#include <catch2/catch.hpp>
#include <cmath>
#include <map>
#include <set>

#include "core/physics.h"
#include "simulation/packets.h"
#include "wire/decode.h"
#include "wire/two_way.h"

using namespace kedge;
using namespace kedge::simulation;

namespace {

std::vector<Arrival> arrivals_of(const ScenarioSpec& spec) {
  std::vector<Arrival> arrivals;
  PacketStream stream(spec);
  while (auto arrival = stream.next()) arrivals.push_back(*std::move(arrival));
  return arrivals;
}

class Collected final : public wire::PacketSink {
 public:
  void packet(const wire::Packet& packet) override { packets.push_back(packet); }
  void refused(const wire::Refusal& refusal) override { FAIL("refused: " << std::string(refusal.text)); }
  std::vector<wire::Packet> packets;
};

std::vector<wire::Packet> decoded(const ScenarioSpec& spec) {
  Collected sink;
  wire::Decoder decoder(spec.site.propagation_speed_mps);
  for (const Arrival& arrival : arrivals_of(spec)) decoder.decode(arrival.bytes, sink);
  return sink.packets;
}

ScenarioSpec ideal(Scenario scenario, double duration_s) {
  ScenarioSpec spec = spec_of(scenario, 17);
  spec.faults = Faults::none();
  spec.duration_s = duration_s;
  return spec;
}

}  // namespace

TEST_CASE("the same seed gives the same bytes, another seed others") {
  ScenarioSpec spec = spec_of(Scenario::flight, 3);
  spec.duration_s = 10.0;
  spec.range_form = RangeForm::second_reply;
  const auto same = [](const Arrival& a, const Arrival& b) { return a.time_ns == b.time_ns && a.bytes == b.bytes; };
  const auto once = arrivals_of(spec);
  const auto again = arrivals_of(spec);
  CHECK(std::equal(once.begin(), once.end(), again.begin(), again.end(), same));
  spec.seed = 4;
  const auto other = arrivals_of(spec);
  CHECK_FALSE(std::equal(once.begin(), once.end(), other.begin(), other.end(), same));
}

TEST_CASE("arrivals come in order of time, every packet passes the door, and none is missing") {
  for (const bool bundled : {false, true}) {
    ScenarioSpec spec = ideal(Scenario::triangle, 10.0);
    spec.bundled = bundled;
    const auto arrivals = arrivals_of(spec);
    CHECK(std::is_sorted(arrivals.begin(), arrivals.end(),
                         [](const Arrival& a, const Arrival& b) { return a.time_ns < b.time_ns; }));
    CHECK(arrivals.size() == (bundled ? 200U : 400U));
    std::set<std::uint32_t> sequences;
    int samples = 0;
    int ranges = 0;
    for (const wire::Packet& packet : decoded(spec)) {
      sequences.insert(packet.sequence);
      CHECK(packet.device_id == 11);
      if (const auto* batch = std::get_if<wire::InertialBatch>(&packet.body)) {
        samples += static_cast<int>(batch->count);
        CHECK(batch->sample_interval_us == 10'000);
      } else {
        ++ranges;
      }
    }
    CHECK(samples == 1000);
    CHECK(ranges == 200);
    CHECK(sequences.size() == 400);
    CHECK(*sequences.rbegin() == 399);
  }
}

TEST_CASE("packets say what the sensors read") {
  ScenarioSpec spec = ideal(Scenario::flight, 5.0);
  spec.faults.gyro_noise_radps_rthz = 1e-3;
  std::map<std::uint64_t, InertialReading> by_time_us;
  Sensors sensors(spec);
  while (const auto reading = sensors.next()) {
    if (const auto* inertial = std::get_if<InertialReading>(&reading->body)) {
      by_time_us[static_cast<std::uint64_t>((reading->time_ns - spec.start_ns) / ns_per_us)] = *inertial;
    }
  }
  for (const wire::Packet& packet : decoded(spec)) {
    const auto* batch = std::get_if<wire::InertialBatch>(&packet.body);
    if (batch == nullptr) continue;
    for (std::uint32_t i = 0; i < batch->count; ++i) {
      const InertialReading& reading = by_time_us.at(packet.device_time_us + i * batch->sample_interval_us);
      const wire::InertialSample& sample = batch->samples.at(i);
      // The wire has single precision.
      CHECK((sample.angular_rate_radps - reading.angular_rate_radps).norm() < 1e-6);
      CHECK((sample.specific_force_mps2 - reading.specific_force_mps2).norm() < 1e-5);
      CHECK(sample.has_field == (i + 1 == batch->count));
    }
    REQUIRE(batch->pressure_pa);
    CHECK(*batch->pressure_pa == Approx(101325.0).margin(300.0));
  }
}

TEST_CASE("counter stamps decode back to the ranges") {
  const RangeForm form = GENERATE(RangeForm::single_sided, RangeForm::double_sided, RangeForm::second_reply);
  const std::uint32_t bits = GENERATE(32U, 40U, 64U);
  ScenarioSpec spec = ideal(Scenario::triangle, 20.0);
  spec.range_form = form;
  spec.counter_bits = bits;
  spec.faults.counter_skew_max_ppm = 20.0;
  std::map<std::uint64_t, double> by_time_us;
  Sensors sensors(spec);
  while (const auto reading = sensors.next()) {
    if (const auto* range = std::get_if<RangeReading>(&reading->body)) {
      by_time_us[static_cast<std::uint64_t>((reading->time_ns - spec.start_ns) / ns_per_us)] = range->range_m;
    }
  }
  // Each stamp is a whole tick; a flight of half the difference of two intervals is off by a tick at
  // most, 4.69 mm. The clock offset in steps of 0.1 ppm adds 0.05 ppm of 330 us, half: 2.5 mm.
  const double tick_m = spec.site.propagation_speed_mps * ranging_tick_s;
  const double tolerance_m = 1.01 * tick_m + (form == RangeForm::single_sided ? 0.0026 : 0.0);
  int compared = 0;
  double sum_m = 0.0;
  for (const wire::Packet& packet : decoded(spec)) {
    const auto* range = std::get_if<wire::Range>(&packet.body);
    if (range == nullptr) continue;
    const double error_m = range->range_m - by_time_us.at(packet.device_time_us);
    CHECK(std::abs(error_m) < tolerance_m);
    sum_m += error_m;
    ++compared;
  }
  CHECK(compared == 400);
  CHECK(std::abs(sum_m / compared) < tolerance_m);
}

TEST_CASE("without the clock offset a single-sided range is off by half of c x offset x answer time") {
  // Neirynck, Luk, McLaughlin 2016; here 20 ppm at least one way over 330 us is some metre.
  ScenarioSpec spec = ideal(Scenario::triangle, 5.0);
  spec.range_form = RangeForm::single_sided;
  spec.faults.counter_skew_max_ppm = 20.0;
  Random counters(spec.seed, 15);  // the stream of the counters: tag first, then anchor
  const RadioCounter tag(counters, 20.0);
  const RadioCounter anchor(counters, 20.0);
  const double true_m = 30.0;
  packets::v1::Range range;
  fill_two_way(RangeForm::single_sided, spec.start_ns, true_m, spec.site.propagation_speed_mps, tag, anchor, 40, range);
  const auto& stamps = range.two_way().single_sided();
  const wire::TwoWay blind{
      40, wire::SingleSided{stamps.poll_tx(), stamps.poll_rx(), stamps.reply_tx(), stamps.reply_rx(), {}}};
  const auto seen_m = wire::two_way_range_m(blind, spec.site.propagation_speed_mps);
  REQUIRE(seen_m);
  const double offset = 1e-6 * (tag.skew_ppm() - anchor.skew_ppm());
  CHECK(*seen_m - true_m == Approx(0.5 * spec.site.propagation_speed_mps * offset * 330e-6).margin(0.01));
}

TEST_CASE("the device clock runs at its own rate from its own origin") {
  ScenarioSpec spec = ideal(Scenario::triangle, 100.0);
  spec.faults.clock_skew_max_ppm = 20.0;
  spec.faults.clock_random_origin = true;
  const DeviceClock clock(spec);
  CHECK(std::abs(clock.skew_ppm()) <= 20.0);
  const auto begin_us = static_cast<double>(clock.reading_us(spec.start_ns));
  const auto end_us = static_cast<double>(clock.reading_us(spec.start_ns + 1000 * ns_per_s));
  CHECK(end_us - begin_us == Approx(1e9 * (1.0 + 1e-6 * clock.skew_ppm())).margin(2.0));

  SECTION("and wraps where asked to") {
    spec.faults.clock_wrap_after_s = 50.0;
    std::uint64_t before_us = 0;
    std::uint64_t wraps = 0;
    for (const wire::Packet& packet : decoded(spec)) {
      CHECK(packet.device_time_us < (std::uint64_t{1} << 32U));
      // A batch carries the time of its first sample and so may lie behind a range before it.
      if (!std::holds_alternative<wire::Range>(packet.body)) continue;
      if (packet.device_time_us + (std::uint64_t{1} << 31U) < before_us) ++wraps;
      before_us = packet.device_time_us;
    }
    CHECK(wraps == 1);
  }
  SECTION("and restarts where asked to") {
    spec.faults.restart_after_s = 50.0;
    const auto packets = decoded(spec);
    const auto restarted = std::find_if(packets.begin() + 1, packets.end(),
                                        [](const wire::Packet& packet) { return packet.sequence == 0; });
    REQUIRE(restarted != packets.end());
    CHECK(restarted->device_time_us < 60'000);
    CHECK(std::abs(restarted - packets.begin() - 2000) < 5);
  }
}

TEST_CASE("links lose, repeat, delay and overtake as asked for") {
  ScenarioSpec spec = ideal(Scenario::triangle, 500.0);
  spec.faults.datagram_loss = 0.05;
  spec.faults.datagram_duplicate = 0.03;
  spec.faults.datagram_held = 0.02;
  spec.faults.datagram_held_s = 0.120;
  spec.faults.delay_min_s = 0.002;
  spec.faults.delay_jitter_s = 0.004;
  constexpr double sent = 20'000.0;
  double arrived = 0.0;
  double repeated = 0.0;
  double overtaken = 0.0;
  double delay_sum_s = 0.0;
  std::set<std::uint32_t> seen;
  std::uint32_t newest = 0;
  Collected sink;
  wire::Decoder decoder(spec.site.propagation_speed_mps);
  for (const Arrival& arrival : arrivals_of(spec)) {
    decoder.decode(arrival.bytes, sink);
    const wire::Packet& packet = sink.packets.back();
    ++arrived;
    if (!seen.insert(packet.sequence).second) ++repeated;
    // Held for 60 ms on average, at 40 datagrams a second: most are overtaken.
    if (packet.sequence + 1 < newest) ++overtaken;
    newest = std::max(newest, packet.sequence);
    const auto* batch = std::get_if<wire::InertialBatch>(&packet.body);
    const double spanned_us = batch == nullptr ? 0.0 : (batch->count - 1.0) * batch->sample_interval_us;
    const double delay_s =
        seconds(arrival.time_ns - spec.start_ns) - 1e-6 * (static_cast<double>(packet.device_time_us) + spanned_us);
    CHECK(delay_s > 0.002 - 2e-6);
    delay_sum_s += delay_s;
  }
  const auto margin = [](double share) { return 4.0 * std::sqrt(share * (1.0 - share) / sent); };
  CHECK(static_cast<double>(seen.size()) / sent == Approx(0.95).margin(margin(0.05)));
  CHECK(repeated / sent == Approx(0.95 * 0.03).margin(margin(0.03)));
  // 2 ms, 4 ms on average, and 60 ms for one in fifty.
  CHECK(delay_sum_s / arrived == Approx(0.0072).epsilon(0.05));
  CHECK(overtaken / sent > 0.005);
}

TEST_CASE("a fleet's arrivals are those of its tags, merged in time") {
  std::vector<ScenarioSpec> specs = {spec_of(Scenario::triangle, 1), spec_of(Scenario::rows, 2),
                                     spec_of(Scenario::flight, 3)};
  std::size_t alone = 0;
  for (ScenarioSpec& spec : specs) {
    spec.duration_s = 5.0;
    alone += arrivals_of(spec).size();
  }
  Fleet fleet(specs);
  std::size_t together = 0;
  TimeNs last_ns = 0;
  std::set<std::uint32_t> tags;
  while (const auto arrival = fleet.next()) {
    CHECK(arrival->time_ns >= last_ns);
    last_ns = arrival->time_ns;
    tags.insert(arrival->tag);
    ++together;
  }
  CHECK(together == alone);
  CHECK(tags.size() == 3);
}
