#include "wire/deframer.h"

#include <catch2/catch.hpp>
#include <random>
#include <vector>

#include "core/archive.h"
#include "support/bytes.h"
#include "wire/encode.h"

using namespace kedge;
using namespace kedge::wire;
using Bytes = std::vector<std::byte>;

namespace {

Bytes datagram(std::size_t size, unsigned seed) {
  std::mt19937 random(seed);
  Bytes bytes(size);
  for (std::byte& byte : bytes) byte = static_cast<std::byte>(random() % 5 == 0 ? 0 : random());
  return bytes;
}

void append(Bytes& to, const Bytes& bytes) { to.insert(to.end(), bytes.begin(), bytes.end()); }

struct Collector {
  std::vector<Bytes> datagrams;
  void operator()(std::span<const std::byte> bytes) { datagrams.emplace_back(bytes.begin(), bytes.end()); }
};

}  // namespace

TEST_CASE("frames come out whole whatever the chunks") {
  Bytes stream;
  std::vector<Bytes> sent;
  for (unsigned i = 1; i <= 40; ++i) {
    sent.push_back(datagram(i * i, i));
    append(stream, frame(sent.back()));
  }
  const std::size_t chunk = GENERATE(1, 2, 7, 64, 1000, 100'000);
  Deframer deframer;
  Collector got;
  for (std::size_t at = 0; at < stream.size(); at += chunk) {
    deframer.push(std::span(stream).subspan(at, std::min(chunk, stream.size() - at)), got);
  }
  CHECK(got.datagrams == sent);
  CHECK(deframer.counters().frames == 40);
  CHECK(deframer.counters().bytes_dropped == 0);
}

TEST_CASE("the greatest datagram passes, one more is oversize") {
  Deframer deframer;
  Collector got;
  // Without zeros COBS is at its longest.
  const Bytes greatest(datagram_bytes_max, std::byte{0xA5});
  deframer.push(frame(greatest), got);
  REQUIRE(got.datagrams.size() == 1);
  CHECK(got.datagrams.front() == greatest);
  const Bytes beyond = frame(Bytes(datagram_bytes_max + 1, std::byte{0xA5}));
  deframer.push(beyond, got);
  CHECK(got.datagrams.size() == 1);
  CHECK(deframer.counters().oversize == 1);
  CHECK(deframer.counters().bytes_dropped == beyond.size());
}

TEST_CASE("noise costs the frame it hits and no other") {
  const Bytes first = frame(datagram(50, 1));
  const Bytes second = frame(datagram(50, 2));
  for (std::size_t at = 0; at < first.size(); ++at) {
    for (unsigned bit = 0; bit < 8; ++bit) {
      Bytes stream = first;
      stream[at] ^= static_cast<std::byte>(1U << bit);
      append(stream, second);
      append(stream, second);
      Deframer deframer;
      Collector got;
      deframer.push(stream, got);
      INFO("byte " << at << " bit " << bit);
      // A flip of the last zero joins the first frame to the second.
      REQUIRE(got.datagrams == std::vector<Bytes>(at + 1 < first.size() ? 2 : 1, datagram(50, 2)));
      const auto& counters = deframer.counters();
      REQUIRE(counters.crc_failures + counters.malformed >= 1);
      // A flip that makes a zero next to another, or to the start, makes an empty frame of it.
      const bool empty = stream[at] == std::byte{0} && (at == 0 || at + 2 == first.size());
      const std::size_t joined = at + 1 < first.size() ? 0 : second.size();
      REQUIRE(counters.bytes_dropped == first.size() + joined - (empty ? 1 : 0));
    }
  }
}

TEST_CASE("a long run of noise is passed over, counted, and forgotten at the next zero") {
  Deframer deframer;
  Collector got;
  Bytes noise(10'000, std::byte{0x55});
  for (int i = 0; i < 5; ++i) deframer.push(noise, got);
  CHECK(deframer.counters().oversize == 1);
  CHECK(deframer.counters().bytes_dropped == 50'000);
  deframer.push(Bytes{std::byte{0}}, got);
  deframer.push(frame(datagram(20, 3)), got);
  REQUIRE(got.datagrams.size() == 1);
  CHECK(got.datagrams.front() == datagram(20, 3));
  CHECK(deframer.counters().bytes_dropped == 50'001);
}

TEST_CASE("empty frames are silent, frames without a datagram are not") {
  Deframer deframer;
  Collector got;
  deframer.push(test::from_hex("00 00 00"), got);
  CHECK(deframer.counters().bytes_dropped == 0);
  deframer.push(frame({}), got);  // a check of nothing
  CHECK(deframer.counters().malformed == 1);
  CHECK(got.datagrams.empty());
}

TEST_CASE("held bytes are state") {
  Bytes stream = frame(datagram(300, 4));
  append(stream, Bytes(frame_bytes_max + 10, std::byte{0x11}));
  append(stream, Bytes{std::byte{0}});
  append(stream, frame(datagram(10, 5)));
  for (std::size_t cut = 0; cut <= stream.size(); cut += 13) {
    Deframer before;
    Collector got;
    before.push(std::span(stream).first(cut), got);
    Saver saver;
    saver(before);
    Deframer after;
    Loader loader(saver.bytes());
    loader(after);
    REQUIRE(loader.ok());
    REQUIRE(loader.left() == 0);
    after.push(std::span(stream).subspan(cut), got);
    REQUIRE(got.datagrams.size() == 2);
    REQUIRE(after.counters().oversize == 1);
    REQUIRE(after.counters().bytes_dropped == frame_bytes_max + 11);
  }
}

TEST_CASE("a state that claims too much is refused") {
  Saver saver;
  std::size_t held = frame_bytes_max + 2;
  DeframerCounters counters;
  saver(held, counters);
  Deframer deframer;
  Loader loader(saver.bytes());
  loader(deframer);
  CHECK_FALSE(loader.ok());
}
