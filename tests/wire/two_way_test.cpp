#include "wire/two_way.h"

#include <fmt/core.h>

#include <catch2/catch.hpp>
#include <cmath>
#include <random>

#include "core/physics.h"

using namespace kedge;
using namespace kedge::wire;

namespace {

/// One exchange as true instants, read by two counters.
struct Bench {
  unsigned bits = 40;
  double tag_ppm = 0.0;
  double anchor_ppm = 0.0;
  std::uint64_t tag_origin = 0;
  std::uint64_t anchor_origin = 0;

  [[nodiscard]] std::uint64_t read(double time_s, double ppm, std::uint64_t origin) const {
    const auto ticks = static_cast<std::uint64_t>(std::llround(time_s / ranging_tick_s * (1.0 + ppm * 1e-6)));
    const std::uint64_t mask = bits == 64 ? ~std::uint64_t{0} : (std::uint64_t{1} << bits) - 1;
    return (origin + ticks) & mask;
  }
  [[nodiscard]] std::uint64_t tag(double time_s) const { return read(time_s, tag_ppm, tag_origin); }
  [[nodiscard]] std::uint64_t anchor(double time_s) const { return read(time_s, anchor_ppm, anchor_origin); }

  [[nodiscard]] TwoWay single_sided(double flight_s, double answer_s, bool with_offset) const {
    SingleSided x{tag(0), anchor(flight_s), anchor(flight_s + answer_s), tag(2 * flight_s + answer_s), {}};
    if (with_offset) x.clock_offset_ppm = ((1.0 + anchor_ppm * 1e-6) / (1.0 + tag_ppm * 1e-6) - 1.0) * 1e6;
    return {bits, x};
  }
  [[nodiscard]] TwoWay double_sided(double flight_s, double answer_s, double second_answer_s, bool symmetric) const {
    const double final_s = 2 * flight_s + answer_s + second_answer_s;
    return {bits, DoubleSided{tag(0), anchor(flight_s), anchor(flight_s + answer_s), tag(2 * flight_s + answer_s),
                              tag(final_s), anchor(final_s + flight_s), symmetric}};
  }
  [[nodiscard]] TwoWay second_reply(double flight_s, double answer_s, double spacing_s) const {
    return {bits, SecondReply{tag(0), anchor(flight_s), anchor(flight_s + answer_s), tag(2 * flight_s + answer_s),
                              anchor(flight_s + answer_s + spacing_s), tag(2 * flight_s + answer_s + spacing_s)}};
  }
};

double range_m(const TwoWay& stamps) {
  const auto result = two_way_range_m(stamps, propagation_speed_mps_default);
  INFO((result ? std::string() : result.error()));
  REQUIRE(result.ok());
  return *result;
}

std::string error(const TwoWay& stamps) {
  const auto result = two_way_range_m(stamps, propagation_speed_mps_default);
  REQUIRE_FALSE(result.ok());
  return result.error();
}

}  // namespace

TEST_CASE("every form finds the distance, whatever the clocks and the counters' turns") {
  std::mt19937_64 random(5);
  const auto uniform = [&](double low, double high) {
    return low + (high - low) * static_cast<double>(random() % 1'000'000) * 1e-6;
  };
  for (int i = 0; i < 2000; ++i) {
    Bench bench;
    bench.bits = i % 3 == 0 ? 32 : (i % 3 == 1 ? 40 : 64);
    bench.tag_ppm = uniform(-20, 20);
    bench.anchor_ppm = uniform(-20, 20);
    bench.tag_origin = random();
    bench.anchor_origin = random();
    const double truth_m = uniform(0, 500);
    const double flight_s = truth_m / propagation_speed_mps_default;
    const double answer_s = uniform(200e-6, 3e-3);
    // Each stamp is rounded to a tick, 4.7 mm; the products stretch some of them a little.
    const double tolerance_m = 0.012;
    INFO(fmt::format("round {}: {} m", i, truth_m));
    REQUIRE(range_m(bench.single_sided(flight_s, answer_s, true)) == Approx(truth_m).margin(tolerance_m));
    REQUIRE(range_m(bench.double_sided(flight_s, answer_s, answer_s, true)) ==
            Approx(truth_m).margin(tolerance_m + 0.01));
    REQUIRE(range_m(bench.double_sided(flight_s, answer_s, uniform(200e-6, 9e-3), false)) ==
            Approx(truth_m).margin(tolerance_m + 0.01));
    REQUIRE(range_m(bench.second_reply(flight_s, answer_s, uniform(3e-3, 9e-3))) ==
            Approx(truth_m).margin(tolerance_m + 0.01));
  }
}

TEST_CASE("long intervals of 64-bit counters lose nothing") {
  Bench bench;
  bench.bits = 64;
  bench.tag_ppm = 20.0;
  bench.anchor_ppm = -20.0;
  bench.tag_origin = ~std::uint64_t{0} - 1000;
  const double flight_s = 100.0 / propagation_speed_mps_default;
  // Products of these intervals have 71 bits. The stamps themselves are made in floating point here.
  CHECK(range_m(bench.double_sided(flight_s, 0.5, 0.7, false)) == Approx(100.0).margin(0.02));
}

TEST_CASE("stamps that cannot be are refused with the reason") {
  Bench bench;
  const double flight_s = 30e-9;
  auto stamps = bench.single_sided(flight_s, 1e-3, false);
  stamps.counter_bits = 15;
  CHECK(error(stamps) == "two_way: counter_bits 15 is not within 16 to 64");
  stamps.counter_bits = 65;
  CHECK(error(stamps) == "two_way: counter_bits 65 is not within 16 to 64");

  auto swapped = bench.single_sided(flight_s, 1e-3, false);
  auto& single = std::get<SingleSided>(swapped.exchange);
  std::swap(single.poll_rx, single.reply_tx);
  CHECK(error(swapped).find("the stamps give ") == std::string("two_way: ").size());

  single = std::get<SingleSided>(bench.single_sided(flight_s, 1e-3, false).exchange);
  single.clock_offset_ppm = 250.0;
  CHECK(error(swapped) == "two_way: clock_offset_ppm 250 is beyond +-200 ppm");
  single.clock_offset_ppm = std::nan("");
  CHECK(error(swapped) == "two_way: clock_offset_ppm nan is beyond +-200 ppm");

  CHECK(error({40, SecondReply{}}) ==
        "two_way: reply to second reply is 0 ticks by the tag and 0 by the anchor, more than 200 ppm apart: are the "
        "stamps of one exchange, and is counter_bits right?");
  CHECK(error({40, DoubleSided{}}).find("poll to final is 0 ticks") != std::string::npos);
  SecondReply slow;
  slow.second_reply_tx = 100'000'000;
  slow.second_reply_rx = 100'030'000;
  CHECK(error({40, slow}).find("is 100030000 ticks by the tag and 100000000 by the anchor") != std::string::npos);
  // No answer time and no way: zero metres, whichever form.
  CHECK(range_m({40, SingleSided{}}) == 0.0);
}

TEST_CASE("no stamps whatever make a number that is none") {
  std::mt19937_64 random(23);
  for (int i = 0; i < 20'000; ++i) {
    const auto draw = [&] { return random() % 4 == 0 ? random() % 3 : random() >> (random() % 64); };
    const unsigned bits = static_cast<unsigned>(random() % 80);
    TwoWay stamps{bits, SingleSided{draw(), draw(), draw(), draw(), {}}};
    if (i % 3 == 1) stamps.exchange = DoubleSided{draw(), draw(), draw(), draw(), draw(), draw(), random() % 2 == 0};
    if (i % 3 == 2) stamps.exchange = SecondReply{draw(), draw(), draw(), draw(), draw(), draw()};
    const auto result = two_way_range_m(stamps, propagation_speed_mps_default);
    if (result) {
      REQUIRE(*result >= range_m_min);
      REQUIRE(*result <= range_m_max);
    } else {
      REQUIRE_FALSE(result.error().empty());
    }
  }
}
