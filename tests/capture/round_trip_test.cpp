#include <fmt/core.h>

#include <catch2/catch.hpp>
#include <fstream>
#include <limits>
#include <random>
#include <sstream>

#include "capture/format.h"
#include "capture/sample.h"

using namespace kedge;
using namespace kedge::capture;
using namespace kedge::test;

namespace {

/// The bytes of the worked example, from the document itself.
std::vector<std::byte> documented_example() {
  std::ifstream file(KEDGE_SOURCE_DIR "/daemon/capture/FORMAT.md");
  std::vector<std::byte> bytes;
  bool inside = false;
  for (std::string line; std::getline(file, line);) {
    if (line.starts_with("```")) inside = !inside;
    if (!inside || line.starts_with("```") || line.starts_with("#")) continue;
    std::istringstream words(line);
    for (unsigned value = 0; words >> std::hex >> value;) bytes.push_back(static_cast<std::byte>(value));
  }
  return bytes;
}

}  // namespace

TEST_CASE("what was written comes back") {
  const CaptureHead head = sample_head();
  const std::vector<Kept> records = sample_records();
  const Written written = write(head, records);
  const std::size_t piece = GENERATE(std::size_t{1}, std::size_t{7}, std::size_t{1} << 20U);
  const ReadBack back = read(written.bytes, piece);
  CHECK(back.refusal.empty());
  CHECK(back.head_intact);
  CHECK(back.damages.empty());
  CHECK(back.records == records);
  CHECK(back.head.program == head.program);
  CHECK(back.head.version == head.version);
  CHECK(back.head.build == head.build);
  CHECK(back.head.features == head.features);
  CHECK(back.head.configuration == head.configuration);
  CHECK(back.head.utc_minus_monotonic_ns == head.utc_minus_monotonic_ns);
  REQUIRE(back.head.links.size() == 2);
  CHECK(back.head.links[0].name == "field");
  CHECK(back.head.links[0].kind == LinkKind::udp);
  CHECK(back.head.links[1].name == "cable");
  CHECK(back.head.links[1].kind == LinkKind::serial);
}

// The bytes were made with another program (Python's struct and zlib) from the tables of FORMAT.md, and tshark
// and capinfos 4.0 show them as described there.
TEST_CASE("the worked example of FORMAT.md is what the writer writes and the reader reads") {
  const std::vector<std::byte> example = documented_example();
  REQUIRE(example.size() == 568);
  CaptureHead head = sample_head();
  head.utc_minus_monotonic_ns = 1'700'000'000'000'000'000;
  head.links.pop_back();
  const std::vector<Kept> records = {
      {5'000'000'000, 0, 0, {std::byte{0x0A}, std::byte{0}}, {}},
      {5'012'345'678, 1, 0, bytes_of("abc"), {Family::v4, {{192, 0, 2, 1}, 7000}, {{192, 0, 2, 2}, 7100}}}};
  CHECK(write(head, records).bytes == example);
  const ReadBack back = read(example);
  CHECK(back.records == records);
  CHECK(back.damages.empty());
  CHECK(back.head.configuration == "site { name: \"yard\" }\n");
}

TEST_CASE("times come back to the nanosecond whatever the offset") {
  constexpr TimeNs least = std::numeric_limits<TimeNs>::min();
  constexpr TimeNs most = std::numeric_limits<TimeNs>::max();
  CaptureHead head = sample_head();
  head.utc_minus_monotonic_ns = GENERATE_COPY(TimeNs{0}, TimeNs{-1}, TimeNs{1'800'000'000'000'000'001}, least, most);
  std::vector<Kept> records;
  for (const TimeNs time_ns : {TimeNs{0}, TimeNs{-1}, TimeNs{1}, TimeNs{-1'000'000'007}, most, least}) {
    records.push_back({time_ns, 0, records.size(), bytes_of("x"), {}});
  }
  const ReadBack back = read(write(head, records).bytes);
  CHECK(back.head.utc_minus_monotonic_ns == head.utc_minus_monotonic_ns);
  CHECK(back.records == records);
}

TEST_CASE("a long configuration is split between characters and joined again") {
  CaptureHead head = sample_head();
  const std::size_t shift = GENERATE(0U, 1U, 2U, 3U);
  head.configuration = std::string(shift, '#');
  for (int i = 0; i < 60'001; ++i) head.configuration += "\xE2\x82\xAC";  // the euro sign, three bytes
  const Written written = write(head, sample_records());
  const ReadBack back = read(written.bytes);
  CHECK(back.head.configuration == head.configuration);
  CHECK(back.records == sample_records());

  std::string all(written.bytes.size(), ' ');
  std::memcpy(all.data(), written.bytes.data(), all.size());
  for (int part = 1; part <= 4; ++part) {
    const std::string title = fmt::format("kedge configuration, part {} of 4\n", part);
    const std::size_t at = all.find(title);
    REQUIRE(at != std::string::npos);
    const auto size = format::get<std::uint16_t>(written.bytes, at - 2, false);
    CHECK(size <= 65535 - 3);
    // The next part begins with a whole character: not with a continuation byte (RFC 3629).
    CHECK((static_cast<unsigned>(all[at + title.size()]) & 0xC0U) != 0x80U);
  }
}

TEST_CASE("the largest configuration and the largest records fit") {
  CaptureHead head = sample_head();
  head.configuration.assign(configuration_bytes_max, 'c');
  std::vector<Kept> records = sample_records();
  records[1].bytes.assign(65507, std::byte{1});
  records[2].bytes.assign(65535, std::byte{2});
  records[3].bytes.assign(65527, std::byte{3});
  const ReadBack back = read(write(head, records).bytes);
  CHECK(back.head.configuration == head.configuration);
  CHECK(back.records == records);
  CHECK(back.damages.empty());
}

TEST_CASE("random records come back") {
  const auto seed = std::random_device{}();
  INFO("seed " << seed);
  std::mt19937_64 random(seed);
  std::vector<Kept> records;
  for (int i = 0; i < 2000; ++i) {
    Kept record = sample_records()[random() % 7];
    record.time_ns = static_cast<TimeNs>(random());
    record.sequence = random();
    record.bytes.resize(random() % 1500);
    for (std::byte& byte : record.bytes) byte = static_cast<std::byte>(random());
    for (auto& byte : record.path.from.address) byte = static_cast<std::uint8_t>(random());
    if (record.path.family == Family::none) record.path = {};
    if (record.path.family == Family::v4) std::fill_n(record.path.from.address.begin() + 4, 12, std::uint8_t{0});
    records.push_back(record);
  }
  const ReadBack back = read(write(sample_head(), records).bytes);
  CHECK(back.damages.empty());
  CHECK(back.records == records);
}

TEST_CASE("the writer refuses what the format cannot hold, and the capture stays good") {
  MemorySink sink;
  Result<CaptureWriter> writer = CaptureWriter::begin(sink, sample_head());
  REQUIRE(writer);
  const std::vector<Kept> good = sample_records();
  REQUIRE(writer->write(good[0].arrival()));

  const auto refusal = [&](Kept record) {
    const Status status = writer->write(record.arrival());
    return status ? std::string() : status.error();
  };
  Kept record = good[1];
  record.source = 3;
  CHECK(refusal(record) == "a record of source 3, but the capture names only 0 to 2");
  record = good[1];
  record.path = {};
  CHECK(refusal(record) == "a record of source 1 without addresses");
  record = good[2];
  record.path = good[1].path;
  CHECK(refusal(record) == "a record of source 2 with addresses");
  record = good[1];
  record.bytes.resize(65508);
  CHECK(refusal(record) == "a record of 65508 bytes is longer than the 65507 that source 1 can have");
  record = good[2];
  record.bytes.resize(65536);
  CHECK(refusal(record) == "a record of 65536 bytes is longer than the 65535 that source 2 can have");

  REQUIRE(writer->write(good[1].arrival()));
  CHECK(read(sink.held).records == std::vector<Kept>{good[0], good[1]});
}

TEST_CASE("a head that the format cannot hold is refused") {
  const auto refusal = [](const CaptureHead& head) {
    MemorySink sink;
    const Result<CaptureWriter> writer = CaptureWriter::begin(sink, head);
    CHECK(sink.held.empty());
    return writer ? std::string() : writer.error();
  };
  CaptureHead head = sample_head();
  head.configuration.assign(configuration_bytes_max + 1, 'c');
  CHECK(refusal(head) == "a configuration of 4194305 bytes is longer than the 4194304 a capture holds");
  head = sample_head();
  head.version = "1 2";
  CHECK(refusal(head) == "the version has a space in it: 1 2");
  head = sample_head();
  head.build = "a\nb";
  CHECK(refusal(head) == "the build identification has more than one line");
  head = sample_head();
  head.links[1].name.assign(1001, 'n');
  CHECK(refusal(head) == "a link's name of 1001 bytes is longer than the 1000 a capture holds");
  head = sample_head();
  head.links.resize(1001);
  CHECK(refusal(head) == "1001 links are more than the 1000 a capture holds");
  head = sample_head();
  head.features.assign(1001, 'f');
  CHECK(refusal(head) == "the processor features of 1001 bytes is longer than the 1000 a capture holds");
}

TEST_CASE("a sink that is full for a while loses whole records only") {
  MemorySink sink;
  Result<CaptureWriter> writer = CaptureWriter::begin(sink, sample_head());
  REQUIRE(writer);
  const std::vector<Kept> records = sample_records();
  sink.room = 200;
  std::vector<Kept> taken;
  for (const Kept& record : records) {
    if (writer->write(record.arrival())) taken.push_back(record);
  }
  CHECK(taken.size() < records.size());
  sink.room = SIZE_MAX;
  REQUIRE(writer->write(records.back().arrival()));
  taken.push_back(records.back());
  const ReadBack back = read(sink.held);
  CHECK(back.records == taken);
  CHECK(back.damages.empty());
}
