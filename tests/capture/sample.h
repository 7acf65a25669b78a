// A small capture with every kind of record, and reading one back into plain lists.
#pragma once

#include <algorithm>
#include <string>
#include <string_view>
#include <vector>

#include "capture/capture_reader.h"
#include "capture/capture_writer.h"
#include "core/assert.h"
#include "support/memory_stream.h"

namespace kedge::test {

/// A record that owns its bytes.
struct Kept {
  TimeNs time_ns = 0;
  SourceId source = 0;
  std::uint64_t sequence = 0;
  std::vector<std::byte> bytes;
  capture::UdpPath path;

  [[nodiscard]] capture::Arrival arrival() const { return {{time_ns, source, sequence, bytes}, path}; }
};

inline bool operator==(const Kept& a, const Kept& b) {
  const auto same_end = [](const capture::Endpoint& x, const capture::Endpoint& y) {
    return x.address == y.address && x.port == y.port;
  };
  return a.time_ns == b.time_ns && a.source == b.source && a.sequence == b.sequence && a.bytes == b.bytes &&
         a.path.family == b.path.family && same_end(a.path.from, b.path.from) && same_end(a.path.to, b.path.to);
}

inline std::vector<std::byte> bytes_of(std::string_view text) {
  std::vector<std::byte> bytes(text.size());
  std::transform(text.begin(), text.end(), bytes.begin(), [](char c) { return static_cast<std::byte>(c); });
  return bytes;
}

inline capture::CaptureHead sample_head() {
  capture::CaptureHead head;
  head.program = "kedged";
  head.version = "0.1.0";
  head.build = "g++ 12";
  head.features = "x86-64";
  head.configuration = "site { name: \"yard\" }\n";
  head.utc_minus_monotonic_ns = 1'700'000'000'123'456'789;
  head.links = {{"field", capture::LinkKind::udp}, {"cable", capture::LinkKind::serial}};
  return head;
}

/// Of the station, a UDP link (v4 and v6) and a serial link; sizes 0 to 5, times before and after zero.
inline std::vector<Kept> sample_records() {
  const capture::UdpPath v4 = {capture::Family::v4, {{192, 0, 2, 1}, 7000}, {{192, 0, 2, 2}, 7100}};
  const capture::UdpPath v6 = {capture::Family::v6,
                               {{0x20, 1, 0xD, 0xB8, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 1}, 65535},
                               {{0x20, 1, 0xD, 0xB8, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 2}, 7100}};
  return {{-5, 0, 0, bytes_of("\x0A"), {}},
          {0, 1, 0, bytes_of("abc"), v4},
          {1, 2, 0, bytes_of("defg"), {}},
          {1, 1, 1, bytes_of("hijkl"), v6},
          {2, 1, 2, {}, v4},
          {3'600'000'000'001, 0, 1, bytes_of("mn"), {}},
          {3'600'000'000'002, 2, 1, bytes_of("o"), {}}};
}

struct Written {
  std::vector<std::byte> bytes;
  std::vector<std::size_t> block_ends;  ///< of each record's block; the first is the end of the head
};

inline Written write(const capture::CaptureHead& head, const std::vector<Kept>& records) {
  MemorySink sink;
  Result<capture::CaptureWriter> writer = capture::CaptureWriter::begin(sink, head);
  KEDGE_ASSERT(writer);
  Written written;
  written.block_ends.push_back(sink.held.size());
  for (const Kept& record : records) {
    KEDGE_ASSERT(writer->write(record.arrival()));
    written.block_ends.push_back(sink.held.size());
  }
  written.bytes = sink.held;
  return written;
}

struct ReadBack {
  std::string refusal;  ///< of open()
  capture::CaptureHead head;
  bool head_intact = false;
  std::vector<Kept> records;
  std::vector<capture::Damage> damages;
};

inline ReadBack read(std::span<const std::byte> bytes, std::size_t piece = SIZE_MAX) {
  MemorySource source(bytes, piece);
  ReadBack back;
  Result<capture::CaptureReader> reader = capture::CaptureReader::open(source);
  if (!reader) {
    back.refusal = reader.error();
    return back;
  }
  capture::Arrival arrival;
  for (capture::Next next = reader->next(arrival); next != capture::Next::end; next = reader->next(arrival)) {
    if (next == capture::Next::damage) {
      back.damages.push_back(reader->damage());
    } else {
      const RawRecord& record = arrival.record;
      back.records.push_back(
          {record.time_ns, record.source, record.sequence, {record.bytes.begin(), record.bytes.end()}, arrival.path});
    }
  }
  back.head = reader->head();
  back.head_intact = reader->head_intact();
  return back;
}

}  // namespace kedge::test
