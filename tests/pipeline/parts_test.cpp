// The small parts of the pipeline, each by itself: history, rates, sequence numbers, concerns, standing.
#include <catch2/catch.hpp>
#include <random>

#include "pipeline/concerns.h"
#include "pipeline/history.h"
#include "pipeline/rate_window.h"
#include "pipeline/sequence.h"
#include "pipeline/standing.h"

using namespace kedge;
using namespace kedge::pipeline;

namespace {
constexpr TimeNs window_ns = 5 * ns_per_s;
}

TEST_CASE("history is in order whatever order measurements come in") {
  const unsigned seed = GENERATE(1U, 2U, 3U);
  INFO("seed " << seed);
  std::mt19937 random(seed);
  History history;
  for (std::uint64_t i = 0; i < History::capacity; ++i) {
    Entry entry;
    entry.key = {static_cast<TimeNs>(random() % 500), i};  // many ties
    history.insert(entry);
  }
  CHECK(history.full());
  for (std::size_t i = 1; i < history.size(); ++i) REQUIRE(history[i - 1].key < history[i].key);
  const Key middle = history[1000].key;
  CHECK(history.after(middle) == 1001);
  CHECK(history.after({-1, 0}) == 0);
  CHECK(history.after({1000, 0}) == history.size());
}

TEST_CASE("a rate is events over the time they came in") {
  for (const TimeNs start : {TimeNs{0}, 1000 * ns_per_s + 123, -3 * ns_per_s}) {
    RateWindow rate;
    TimeNs now = start;
    for (int i = 0; i < 400; ++i, now += 50 * ns_per_ms) rate.add(now, window_ns);
    CHECK(rate.rate_hz(now, window_ns) == Approx(20.0).epsilon(0.03));
    CHECK(rate.rate_hz(now + window_ns + ns_per_s, window_ns) == 0.0);
  }
}

TEST_CASE("the first events do not read as thousands a second") {
  RateWindow rate;
  rate.add(0, window_ns);
  rate.add(ns_per_ms, window_ns);
  CHECK(rate.rate_hz(2 * ns_per_ms, window_ns) <= 4.0);
}

TEST_CASE("an empty window has no rate and no total") {
  RateWindow rate;
  CHECK(rate.rate_hz(17 * ns_per_s, window_ns) == 0.0);
  CHECK(rate.total(17 * ns_per_s, window_ns) == 0.0);
}

TEST_CASE("sequence numbers tell duplicates, losses and reordering apart") {
  SequenceTracker tracker;
  CHECK(tracker.note(0xFFFFFFFE, 0, window_ns));
  CHECK(tracker.note(0xFFFFFFFF, 0, window_ns));
  CHECK(tracker.note(1, 0, window_ns));  // over the wrap, 0 is missing
  CHECK_FALSE(tracker.note(1, 0, window_ns));
  CHECK_FALSE(tracker.note(0xFFFFFFFE, 0, window_ns));
  CHECK(tracker.missing_share(0, window_ns) == Approx(0.25));
  CHECK(tracker.note(0, 0, window_ns));  // late, not lost
  CHECK(tracker.missing_share(0, window_ns) == 0.0);
}

TEST_CASE("a far jump of the sequence is a new start, not thousands lost") {
  SequenceTracker tracker;
  CHECK(tracker.note(100, 0, window_ns));
  CHECK(tracker.note(1'000'000, 0, window_ns));
  CHECK_FALSE(tracker.note(7, 0, window_ns));  // one could be very late; two are a device that began anew
  CHECK(tracker.note(8, 0, window_ns));
  CHECK(tracker.note(9, 0, window_ns));
  CHECK(tracker.missing_share(0, window_ns) == 0.0);
}

TEST_CASE("one very late packet is not a new start") {
  SequenceTracker tracker;
  for (std::uint32_t i = 1000; i < 1400; ++i) CHECK(tracker.note(i, 0, window_ns));
  CHECK_FALSE(tracker.note(1050, 0, window_ns));
  CHECK(tracker.note(1400, 0, window_ns));
  CHECK(tracker.missing_share(0, window_ns) == 0.0);
}

TEST_CASE("a device that restarts early is not taken for duplicates") {
  SequenceTracker tracker;
  for (std::uint32_t i = 0; i < 20; ++i) CHECK(tracker.note(i, 0, window_ns));
  tracker.forget();
  for (std::uint32_t i = 0; i < 20; ++i) CHECK(tracker.note(i, 0, window_ns));
}

TEST_CASE("every third packet lost is a third missing") {
  SequenceTracker tracker;
  TimeNs now = 0;
  for (std::uint32_t i = 0; i < 3000; ++i, now += 10 * ns_per_ms) {
    if (i % 3 != 0) tracker.note(i, now, window_ns);
  }
  CHECK(tracker.missing_share(now, window_ns) == Approx(1.0 / 3.0).epsilon(0.02));
}

TEST_CASE("a concern waits before it is raised, starts when the condition did, and lingers") {
  ConcernBook book;
  const Patience patience = {ns_per_s, 2 * ns_per_s};
  book.note(Concern::range_blocked, true, 0.5, 10 * ns_per_s, patience);
  CHECK(book.list().empty());
  CHECK_FALSE(book.take_changed());
  book.note(Concern::range_blocked, true, 0.7, 11 * ns_per_s, patience);
  REQUIRE(book.list().size() == 1);
  CHECK(book.list()[0].concern == Concern::range_blocked);
  CHECK(book.list()[0].since_ns == 10 * ns_per_s);
  CHECK(book.list()[0].figure == 0.7);
  CHECK(book.take_changed());
  CHECK_FALSE(book.take_changed());

  book.note(Concern::range_blocked, false, 0.1, 12 * ns_per_s, patience);
  CHECK(book.raised(Concern::range_blocked));
  book.note(Concern::range_blocked, false, 0.1, 13 * ns_per_s, patience);
  CHECK_FALSE(book.raised(Concern::range_blocked));
  CHECK(book.take_changed());
}

TEST_CASE("a condition that flickers faster than the patience is never raised") {
  ConcernBook book;
  for (int i = 0; i < 100; ++i) book.note(Concern::range_blocked, i % 2 == 0, 1.0, i * 300 * ns_per_ms, {ns_per_s, 0});
  CHECK_FALSE(book.raised(Concern::range_blocked));
}

TEST_CASE("settled is entered and left at different radii") {
  const Limits limits;
  Footing footing = {true, fusion::Phase::single, 2.5, true};
  CHECK(standing_after(Standing::loose, footing, limits) == Standing::loose);
  CHECK(standing_after(Standing::settled, footing, limits) == Standing::settled);
  footing.radius_95_m = 1.9;
  CHECK(standing_after(Standing::loose, footing, limits) == Standing::settled);
  footing.radius_95_m = 3.1;
  CHECK(standing_after(Standing::settled, footing, limits) == Standing::loose);
}

TEST_CASE("standing says the most serious thing first") {
  const Limits limits;
  CHECK(standing_after(Standing::settled, {false, fusion::Phase::single, 1.0, true}, limits) == Standing::silent);
  CHECK(standing_after(Standing::silent, {true, fusion::Phase::waking, {}, false}, limits) == Standing::waking);
  CHECK(standing_after(Standing::waking, {true, fusion::Phase::ring, {}, true}, limits) == Standing::ring);
  CHECK(standing_after(Standing::ring, {true, fusion::Phase::twofold, 40.0, true}, limits) == Standing::twofold);
  CHECK(standing_after(Standing::settled, {true, fusion::Phase::single, 1.0, false}, limits) == Standing::coasting);
  CHECK(standing_after(Standing::coasting, {true, fusion::Phase::single, 60.0, false}, limits) == Standing::lost);
  CHECK(standing_after(Standing::settled, {true, fusion::Phase::single, 60.0, true}, limits) == Standing::lost);
}
