#include "pipeline/engine.h"

#include <catch2/catch.hpp>
#include <random>

#include "pipeline/station.h"

using namespace kedge;
using namespace kedge::pipeline;
using kedge::simulation::Scenario;
using kedge::test::Feeder;
using kedge::test::has;
using kedge::test::Reports;
using kedge::test::settings_of;

namespace {

constexpr TimeNs start_ns = 1000 * ns_per_s;

std::vector<simulation::ScenarioSpec> carts(std::size_t count, double duration_s) {
  std::vector<simulation::ScenarioSpec> specs;
  for (std::size_t i = 0; i < count; ++i) {
    simulation::ScenarioSpec spec = simulation::spec_of(Scenario::triangle, 40 + i);
    spec.duration_s = duration_s;
    spec.name = "cart-" + std::to_string(i + 1);
    spec.device_id = static_cast<std::uint32_t>(11 + i);
    specs.push_back(spec);
  }
  return specs;
}

packets::v1::Packet distance_packet(std::uint32_t device_id, std::uint32_t sequence, std::uint64_t time_us,
                                    float distance_m) {
  packets::v1::Packet packet;
  packet.set_device_id(device_id);
  packet.set_sequence(sequence);
  packet.set_device_time_us(time_us);
  packet.mutable_range()->set_anchor_id(1);
  packet.mutable_range()->mutable_distance()->set_distance_m(distance_m);
  return packet;
}

void send(Feeder& feeder, TimeNs time_ns, const packets::v1::Packet& packet) {
  packets::v1::Datagram datagram;
  *datagram.add_packets() = packet;
  const std::string bytes = datagram.SerializeAsString();
  feeder.datagram(time_ns, std::as_bytes(std::span(bytes)));
}

/// An estimator that falls sick once, after so many measurements: a fault that real data cannot stage.
class SickOnce : public fusion::Estimator {
 public:
  SickOnce(std::unique_ptr<fusion::Estimator> inner, int after) : inner_(std::move(inner)), left_(after) {}

  fusion::Outcome apply(const fusion::Measurement& measurement) override {
    --left_;
    return inner_->apply(measurement);
  }
  [[nodiscard]] fusion::Estimate estimate() const override { return inner_->estimate(); }
  [[nodiscard]] bool healthy() const override { return left_ > 0 || cured_; }
  void reset(bool first) override {
    if (!first) cured_ = true;
    inner_->reset(first);
  }
  [[nodiscard]] std::size_t marks() const override { return inner_->marks(); }
  void keep(std::size_t mark) override { inner_->keep(mark); }
  void rewind(std::size_t mark) override { inner_->rewind(mark); }
  void save(Saver& saver) override { inner_->save(saver); }
  void load(Loader& loader) override { inner_->load(loader); }

 private:
  std::unique_ptr<fusion::Estimator> inner_;
  int left_;
  bool cured_ = false;
};

}  // namespace

TEST_CASE("a cart with a known start is followed and settled") {
  const auto specs = carts(1, 60.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  feeder.run(fleet, start_ns + 60 * ns_per_s);
  REQUIRE(reports.tracks.size() > 500);
  CHECK(reports.tracks.back().standing == Standing::settled);
  const simulation::Vehicle truth(specs[0]);
  const auto& last = reports.tracks.back().estimate;
  const Vector3 error = last.lead.position_m - truth.at(last.time_ns).position_m;
  CHECK(error.head<2>().norm() < 3.0);
  const auto& health = reports.tags.back();
  CHECK(health.inertial_rate_hz == Approx(100.0).epsilon(0.1));
  CHECK(health.range_rate_hz == Approx(18.0).epsilon(0.2));  // 20 Hz, a tenth lost
  CHECK(health.missing_share < 0.1);
  CHECK(reports.stations.back().packets_refused == 0);
}

TEST_CASE("a sick filter restarts its own tag and touches no other") {
  const auto specs = carts(2, 20.0);
  const auto run = [&](Reports& reports, int sick_after) {
    int built = 0;
    Engine engine(settings_of(specs), reports, [&](const fusion::Site& site, const fusion::Tag& tag) {
      auto estimator = fusion::make_estimator(site, tag);
      return built++ == 0 ? std::make_unique<SickOnce>(std::move(estimator), sick_after) : std::move(estimator);
    });
    simulation::Fleet fleet(specs);
    Feeder feeder(engine);
    feeder.run(fleet, start_ns + 20 * ns_per_s);
  };
  Reports well;
  Reports sick;
  run(well, 1'000'000);
  run(sick, 1000);
  for (const TrackReport& report : sick.tracks) CHECK(report.estimate.time_ns >= start_ns);
  CHECK(well.of_tag(0).back().restarts == 0);
  CHECK(sick.of_tag(0).back().restarts == 1);
  CHECK(sick.of_tag(1).back().restarts == 0);
  const auto positions = [](const Reports& reports) {
    std::vector<Vector3> found;
    for (const TrackReport& report : reports.tracks) {
      if (report.tag == 1) found.push_back(report.estimate.lead.position_m);
    }
    return found;
  };
  CHECK(positions(well) == positions(sick));
}

TEST_CASE("unknown devices are counted, remembered up to a limit, and make nothing") {
  const auto specs = carts(1, 10.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  Feeder feeder(engine);
  for (std::uint32_t id = 100; id < 1100; ++id) send(feeder, start_ns + id, distance_packet(id, 1, id, 5.0F));
  feeder.tick(start_ns + ns_per_s);
  CHECK(reports.count(VerdictCode::unknown_device) == 1000);
  REQUIRE(reports.stations.size() == 1);
  CHECK(reports.stations[0].unknown_device_packets == 1000);
  CHECK(reports.stations[0].unknown_devices == 64);
}

TEST_CASE("each packet that is refused says why") {
  const auto specs = carts(1, 10.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  Feeder feeder(engine);

  send(feeder, start_ns, distance_packet(11, 1, 1000, 5.0F));
  send(feeder, start_ns, distance_packet(11, 1, 1000, 5.0F));
  CHECK(reports.count(VerdictCode::duplicate) == 1);

  packets::v1::Packet other_anchor = distance_packet(11, 2, 2000, 5.0F);
  other_anchor.mutable_range()->set_anchor_id(9);
  send(feeder, start_ns + ns_per_ms, other_anchor);
  CHECK(reports.count(VerdictCode::unknown_anchor) == 1);

  send(feeder, start_ns + 2 * ns_per_ms, distance_packet(11, 3, 3000, 812.4F));
  CHECK(reports.count(VerdictCode::beyond_range_max) == 1);
  CHECK(reports.texts.back() == "range 812.4 m is beyond range_max_m 300");

  send(feeder, start_ns + 3 * ns_per_ms, distance_packet(11, 4, 4000, std::numeric_limits<float>::quiet_NaN()));
  CHECK(reports.count(VerdictCode::implausible) == 1);

  const std::string noise = "\xff\xff\xff\xff";
  feeder.datagram(start_ns + 4 * ns_per_ms, std::as_bytes(std::span(noise)));
  CHECK(reports.count(VerdictCode::malformed) == 1);
}

TEST_CASE("random bytes from every source do no harm") {
  const unsigned seed = GENERATE(11U, 12U);
  INFO("seed " << seed);
  std::mt19937 random(seed);
  const auto specs = carts(1, 10.0);
  Settings settings = settings_of(specs);
  settings.links.push_back({"dock", LinkKind::serial});
  Reports reports;
  Engine engine(settings, reports);
  std::vector<std::byte> bytes;
  for (std::uint64_t i = 0; i < 3000; ++i) {
    bytes.resize(random() % 300);
    for (std::byte& byte : bytes) byte = static_cast<std::byte>(random());
    engine.accept({static_cast<TimeNs>(i) * ns_per_ms, static_cast<SourceId>(random() % 5), i, bytes});
  }
  Feeder feeder(engine);
  feeder.tick(10 * ns_per_s);
  CHECK(reports.stations.back().records == 3001);
}

TEST_CASE("an anchor that reports for its tags is a device of its own") {
  const auto specs = carts(1, 10.0);
  Settings settings = settings_of(specs);
  settings.anchor_devices = {900};
  Reports reports;
  Engine engine(settings, reports);
  Feeder feeder(engine);
  packets::v1::Packet packet = distance_packet(900, 1, 1000, 20.0F);
  packet.mutable_range()->set_tag_device_id(11);
  send(feeder, start_ns, packet);
  feeder.tick(start_ns + 100 * ns_per_ms);
  CHECK(reports.count(VerdictCode::unknown_device) == 0);
  CHECK(reports.tags.back().range_age_s.has_value());
  packet.mutable_range()->set_tag_device_id(77);
  packet.set_sequence(2);
  send(feeder, start_ns + ns_per_ms, packet);
  CHECK(reports.count(VerdictCode::unknown_device) == 1);
}

TEST_CASE("a silent anchor is said once, not once for every tag") {
  const auto specs = carts(3, 30.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  const auto without_ranges = [](const simulation::Arrival& arrival) {
    packets::v1::Datagram datagram;
    datagram.ParseFromArray(arrival.bytes.data(), static_cast<int>(arrival.bytes.size()));
    return arrival.time_ns < start_ns + 10 * ns_per_s || !datagram.packets(0).has_range();
  };
  feeder.run(fleet, start_ns + 30 * ns_per_s, without_ranges);
  CHECK(has(reports.anchors.back().concerns, Concern::anchor_silent));
  for (std::uint32_t tag = 0; tag < 3; ++tag) {
    const auto health = reports.of_tag(tag).back();
    CHECK_FALSE(has(health.concerns, Concern::range_stale));
    CHECK((health.standing == Standing::coasting || health.standing == Standing::lost));
  }
}

TEST_CASE("one tag without ranges is stale while the anchor is well") {
  const auto specs = carts(2, 20.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  feeder.run(fleet, start_ns + 20 * ns_per_s, [](const simulation::Arrival& arrival) {
    packets::v1::Datagram datagram;
    datagram.ParseFromArray(arrival.bytes.data(), static_cast<int>(arrival.bytes.size()));
    return arrival.tag != 0 || arrival.time_ns < start_ns + 10 * ns_per_s || !datagram.packets(0).has_range();
  });
  CHECK(has(reports.of_tag(0).back().concerns, Concern::range_stale));
  CHECK_FALSE(has(reports.of_tag(1).back().concerns, Concern::range_stale));
  CHECK_FALSE(has(reports.anchors.back().concerns, Concern::anchor_silent));
}

TEST_CASE("a tag that falls silent is called so, and comes back") {
  const auto specs = carts(1, 40.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  feeder.run(fleet, start_ns + 40 * ns_per_s, [](const simulation::Arrival& arrival) {
    return arrival.time_ns < start_ns + 10 * ns_per_s || arrival.time_ns > start_ns + 30 * ns_per_s;
  });
  bool silent = false;
  for (const TagHealthReport& health : reports.tags) {
    silent |= health.standing == Standing::silent && health.time_ns > start_ns + 19 * ns_per_s;
  }
  CHECK(silent);
  CHECK(reports.tags.back().standing != Standing::silent);
}

TEST_CASE("a step of UTC changes what is shown and nothing else") {
  const auto specs = carts(1, 15.0);
  const auto run = [&](TimeNs step_ns) {
    Reports reports;
    Engine engine(settings_of(specs), reports);
    simulation::Fleet fleet(specs);
    Feeder feeder(engine);
    feeder.run(fleet, start_ns + 8 * ns_per_s);
    station::v1::StationRecord record;
    record.mutable_utc_offset()->set_utc_minus_monotonic_ns(step_ns);
    feeder.station(start_ns + 8 * ns_per_s, record);
    feeder.run(fleet, start_ns + 15 * ns_per_s);
    CHECK(reports.offset_ns == step_ns);
    return reports.tracks.back().estimate.lead.position_m;
  };
  CHECK(run(0) == run(3600 * ns_per_s));
}

TEST_CASE("an operator's word moves the tag") {
  const auto specs = carts(1, 20.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  feeder.run(fleet, start_ns + 10 * ns_per_s);
  const Vector3 before = reports.tracks.back().estimate.lead.position_m;
  // Somewhere else on the ring, so that the ranges do not contradict it at once.
  const Vector2 there = Eigen::Rotation2Dd(radians(40.0)) * before.head<2>();
  station::v1::StationRecord record;
  record.mutable_correction()->set_tag("cart-1");
  record.mutable_correction()->set_east_m(there.x());
  record.mutable_correction()->set_north_m(there.y());
  record.mutable_correction()->set_position_sigma_m(0.3);
  feeder.station(start_ns + 10 * ns_per_s, record);
  feeder.run(fleet, start_ns + 10 * ns_per_s + 200 * ns_per_ms);
  CHECK((reports.tracks.back().estimate.lead.position_m.head<2>() - there).norm() < 2.0);
}

TEST_CASE("an operator's word to a tag that is still waking is its start") {
  simulation::ScenarioSpec spec = carts(1, 12.0)[0];
  const simulation::Vehicle truth(spec);
  Reports reports;
  Engine engine(settings_of({spec}, false), reports);
  simulation::Fleet fleet({spec});
  Feeder feeder(engine);
  station::v1::StationRecord record;
  record.mutable_correction()->set_tag("cart-1");
  record.mutable_correction()->set_east_m(truth.at(start_ns).position_m.x());
  record.mutable_correction()->set_north_m(truth.at(start_ns).position_m.y());
  feeder.station(start_ns, record);
  feeder.run(fleet, start_ns + 12 * ns_per_s);
  CHECK(reports.tracks.back().standing == Standing::settled);
}

TEST_CASE("noise on a serial line is counted and told") {
  Settings settings = settings_of(carts(1, 1.0));
  settings.links.push_back({"dock", LinkKind::serial});
  Reports reports;
  Engine engine(settings, reports);
  const std::string noise = "\x05garbage" + std::string(1, '\0') + "more" + std::string(1, '\0');
  engine.accept({start_ns, 2, 0, std::as_bytes(std::span(noise))});
  REQUIRE(reports.count(VerdictCode::malformed) == 1);
  CHECK(reports.texts.back().find("link dock: 14 bytes that are no frame") == 0);
  Feeder feeder(engine);
  feeder.tick(start_ns + ns_per_s);
  CHECK(reports.stations.back().packets_refused == 1);
}

TEST_CASE("an engine that loads a checkpoint goes on to the same reports") {
  const auto specs = carts(2, 20.0);
  Reports whole;
  Engine first(settings_of(specs), whole);
  simulation::Fleet fleet(specs);
  Feeder feeder(first);
  feeder.run(fleet, start_ns + 9 * ns_per_s + 37 * ns_per_ms);
  Saver saver;
  first.save(saver);
  const std::size_t before = whole.tracks.size();

  Reports rest;
  Engine second(settings_of(specs), rest);
  REQUIRE(second.load(saver.bytes()).ok());
  std::uint64_t n = 0;
  TimeNs tick_ns = start_ns + 10 * ns_per_s;
  Feeder feed_first(first);
  Feeder feed_second(second);
  while (auto arrival = fleet.next()) {
    while (tick_ns <= arrival->time_ns) {
      feed_first.tick(tick_ns);
      feed_second.tick(tick_ns);
      tick_ns += 100 * ns_per_ms;
    }
    first.accept({arrival->time_ns, 1, n, arrival->bytes});
    second.accept({arrival->time_ns, 1, n++, arrival->bytes});
  }
  REQUIRE(whole.tracks.size() - before == rest.tracks.size());
  REQUIRE(rest.tracks.size() > 100);
  for (std::size_t i = 0; i < rest.tracks.size(); ++i) {
    const TrackReport& a = whole.tracks[before + i];
    const TrackReport& b = rest.tracks[i];
    REQUIRE(a.estimate.time_ns == b.estimate.time_ns);
    REQUIRE(a.standing == b.standing);
    REQUIRE(a.estimate.lead.position_m == b.estimate.lead.position_m);
    REQUIRE(a.estimate.lead.position_covariance_m2 == b.estimate.lead.position_covariance_m2);
  }
}

TEST_CASE("a checkpoint cut anywhere, or of another site, is refused with a reason") {
  const auto specs = carts(1, 5.0);
  Reports reports;
  Engine engine(settings_of(specs), reports);
  simulation::Fleet fleet(specs);
  Feeder feeder(engine);
  feeder.run(fleet, start_ns + 4 * ns_per_s);
  Saver saver;
  engine.save(saver);
  const auto& bytes = saver.bytes();
  for (std::size_t length = 0; length < bytes.size(); length += 1 + bytes.size() / 200) {
    Engine other(settings_of(specs), reports);
    CHECK_FALSE(other.load(std::span(bytes).first(length)).ok());
  }
  Engine two(settings_of(carts(2, 5.0)), reports);
  CHECK_FALSE(two.load(bytes).ok());
}
