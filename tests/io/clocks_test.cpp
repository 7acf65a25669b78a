// Clocks and the ticker.
#include <catch2/catch.hpp>
#include <ctime>
#include <thread>
#include <vector>

#include "io/monotonic.h"
#include "io/ticker.h"
#include "support/loop.h"

using namespace kedge;
using namespace std::chrono_literals;

TEST_CASE("a kernel stamp becomes monotonic time, its age clamped to 0 to 1 s") {
  const io::ClockReading now{.monotonic_ns = 50 * ns_per_s, .utc_ns = 1'700'000'000 * ns_per_s};
  CHECK(io::arrival_ns(now, now.utc_ns - 3 * ns_per_ms) == 50 * ns_per_s - 3 * ns_per_ms);
  CHECK(io::arrival_ns(now, now.utc_ns) == 50 * ns_per_s);
  // The UTC clock was set back by an hour after the datagram came: a stamp of the future.
  CHECK(io::arrival_ns(now, now.utc_ns + 3600 * ns_per_s) == 50 * ns_per_s);
  // It was set forward: the stamp looks old, and the order moves by no more than the clamp.
  CHECK(io::arrival_ns(now, now.utc_ns - 3600 * ns_per_s) == 49 * ns_per_s);
}

TEST_CASE("a datagram that waits while UTC is set is not stamped early") {
  const TimeNs utc_ns = 1'700'000'000 * ns_per_s;
  const auto at = [](TimeNs monotonic_ns, TimeNs utc_minus_monotonic_ns) {
    return io::ClockReading{monotonic_ns, monotonic_ns + utc_minus_monotonic_ns};
  };
  io::ReceiveStamps stamps(at(50 * ns_per_s, utc_ns));
  stamps.read(at(51 * ns_per_s, utc_ns));
  CHECK(stamps.arrival_ns(51 * ns_per_s + utc_ns - 3 * ns_per_ms) == 51 * ns_per_s - 3 * ns_per_ms);
  CHECK(stamps.arrival_ns(std::nullopt) == 51 * ns_per_s);
  stamps.emptied();

  // UTC goes forward by 0.3 s between the stamp and the reading.
  const TimeNs later_ns = utc_ns + 300 * ns_per_ms;
  stamps.read(at(52 * ns_per_s, later_ns));
  CHECK(stamps.arrival_ns(52 * ns_per_s + utc_ns - 2 * ns_per_ms) == 52 * ns_per_s);
  // The same for what did not fit in that read.
  stamps.read(at(52 * ns_per_s + ns_per_ms, later_ns));
  CHECK(stamps.arrival_ns(52 * ns_per_s + utc_ns - 2 * ns_per_ms) == 52 * ns_per_s + ns_per_ms);
  stamps.emptied();
  stamps.read(at(53 * ns_per_s, later_ns));
  CHECK(stamps.arrival_ns(53 * ns_per_s + later_ns - 4 * ns_per_ms) == 53 * ns_per_s - 4 * ns_per_ms);
  stamps.emptied();

  // Slewing is no step: 5 ms and no more.
  stamps.read(at(54 * ns_per_s, later_ns + 5 * ns_per_ms));
  CHECK(stamps.arrival_ns(54 * ns_per_s + later_ns) == 54 * ns_per_s - 5 * ns_per_ms);
  stamps.emptied();
  stamps.read(at(55 * ns_per_s, later_ns - ns_per_ms));
  CHECK(stamps.arrival_ns(55 * ns_per_s + later_ns - 20 * ns_per_ms) == 55 * ns_per_s);
}

TEST_CASE("both clocks are the system's, read at one instant") {
  timespec mono{};
  timespec utc{};
  ::clock_gettime(CLOCK_MONOTONIC, &mono);
  ::clock_gettime(CLOCK_REALTIME, &utc);
  const io::ClockReading now = io::read_clocks();
  CHECK(now.monotonic_ns >= mono.tv_sec * ns_per_s + mono.tv_nsec);
  CHECK(now.monotonic_ns < mono.tv_sec * ns_per_s + mono.tv_nsec + ns_per_s);
  CHECK(std::abs(now.utc_minus_monotonic_ns() - (utc.tv_sec - mono.tv_sec) * ns_per_s - (utc.tv_nsec - mono.tv_nsec)) <
        5 * ns_per_ms);
}

TEST_CASE("a change of the UTC offset is told beyond 10 ms or with the synchronised flag") {
  io::UtcWatch watch;
  const TimeNs offset_ns = 1'700'000'000 * ns_per_s;
  REQUIRE(watch.check({offset_ns, false}));
  CHECK_FALSE(watch.check({offset_ns + 10 * ns_per_ms, false}));
  const auto step = watch.check({offset_ns - 11 * ns_per_ms, false});
  REQUIRE(step);
  CHECK(step->utc_minus_monotonic_ns == offset_ns - 11 * ns_per_ms);
  // Slow slewing adds up against what was told last, not against the last look.
  CHECK_FALSE(watch.check({offset_ns - 5 * ns_per_ms, false}));
  CHECK(watch.check({offset_ns, false}));
  CHECK(watch.check({offset_ns, true}));
  CHECK_FALSE(watch.check({offset_ns, true}));
}

TEST_CASE("ticks stand on their grid; missed ones are skipped, counted and never bunched") {
  asio::io_context context;
  const TimeNs period_ns = 10 * ns_per_ms;
  std::vector<io::TickEvent> ticks;
  const TimeNs before_ns = io::now_monotonic();
  io::Ticker ticker(context, period_ns, [&](const io::TickEvent& tick) {
    ticks.push_back(tick);
    if (ticks.size() == 5) std::this_thread::sleep_for(73ms);
  });
  ticker.start();
  REQUIRE(test::run_until(context, [&] { return ticks.size() >= 12; }));
  ticker.stop();

  CHECK(ticks.front().due_ns >= before_ns + period_ns);
  for (std::size_t i = 0; i < ticks.size(); ++i) {
    CAPTURE(i);
    CHECK((ticks[i].due_ns - ticks.front().due_ns) % period_ns == 0);
    CHECK(ticks[i].now_ns >= ticks[i].due_ns);
    CHECK(ticks[i].now_ns < ticks[i].due_ns + period_ns);
    if (i > 0) {
      CHECK(ticks[i].due_ns - ticks[i - 1].due_ns == period_ns * static_cast<TimeNs>(1 + ticks[i].skipped));
    }
  }
  CHECK(ticks[5].skipped >= 6);
  CHECK(ticker.ticks() == ticks.size());
  CHECK(ticker.skipped() >= ticks[5].skipped);

  const std::size_t told = ticks.size();
  test::run_for(context, 30ms);
  CHECK(ticks.size() == told);
}

TEST_CASE("a ticker may be destroyed while its tick is due") {
  asio::io_context context;
  int ticks = 0;
  {
    io::Ticker ticker(context, ns_per_ms, [&](const io::TickEvent&) { ++ticks; });
    ticker.start();
    std::this_thread::sleep_for(5ms);
  }
  test::run_for(context, 10ms);
  CHECK(ticks == 0);
}
