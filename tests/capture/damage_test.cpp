#include <fmt/core.h>

#include <catch2/catch.hpp>

#include "capture/format.h"
#include "capture/sample.h"

using namespace kedge;
using namespace kedge::capture;
using namespace kedge::test;

namespace {

/// Index of the record whose block holds byte `at`; nothing: the head does.
std::optional<std::size_t> record_at(const Written& written, std::size_t at) {
  if (at < written.block_ends[0]) return std::nullopt;
  std::size_t index = 0;
  while (written.block_ends[index + 1] <= at) ++index;
  return index;
}

std::uint32_t u32(std::span<const std::byte> bytes, std::size_t at) {
  return format::get<std::uint32_t>(bytes, at, false);
}

void set_u32(std::span<std::byte> bytes, std::size_t at, std::uint32_t value) {
  std::memcpy(bytes.data() + at, &value, sizeof(value));
}

/// Makes the check of a changed block good again: a lie, not a fault.
void seal(std::span<std::byte> block) {
  set_u32(block, block.size() - 12, format::crc32_of(block.first(block.size() - 16)));
}

/// Writes the block's numbers in the other byte order, as a machine of that order would.
void turn_block(std::span<std::byte> block) {
  const auto turn = [&](std::size_t at, std::size_t size) {
    std::reverse(block.begin() + static_cast<std::ptrdiff_t>(at),
                 block.begin() + static_cast<std::ptrdiff_t>(at + size));
  };
  const std::uint32_t type = u32(block, 0);
  std::size_t option = 0;
  if (type == format::section_header) {
    for (const std::size_t at : {8U}) turn(at, 4);
    for (const std::size_t at : {12U, 14U}) turn(at, 2);
    turn(16, 8);
    option = format::section_fixed;
  } else if (type == format::interface_description) {
    turn(8, 2);
    turn(10, 2);
    turn(12, 4);
    option = format::interface_fixed;
  } else {
    option = format::packet_fixed + format::padded(u32(block, 20));
    for (const std::size_t at : {8U, 12U, 16U, 20U, 24U}) turn(at, 4);
  }
  while (option < block.size() - 16) {
    const auto code = format::get<std::uint16_t>(block, option, false);
    const auto size = format::get<std::uint16_t>(block, option + 2, false);
    if (type == format::enhanced_packet && code == format::packet_hash) turn(option + 5, 4);
    if (type == format::enhanced_packet && code == format::packet_id) turn(option + 4, 8);
    turn(option, 2);
    turn(option + 2, 2);
    option += 4 + format::padded(size);
  }
  turn(0, 4);
  turn(4, 4);
  seal(block);
  turn(option, 2);
  turn(option + 2, 2);
  turn(option + 4, 4);
  turn(option + 12, 4);
}

}  // namespace

TEST_CASE("a capture of the other byte order is read") {
  const Written written = write(sample_head(), sample_records());
  std::vector<std::byte> turned = written.bytes;
  for (std::size_t at = 0; at < turned.size();) {
    const std::size_t length = u32(written.bytes, at + 4);
    turn_block(std::span(turned).subspan(at, length));
    at += length;
  }
  REQUIRE(turned != written.bytes);
  const ReadBack back = read(turned);
  CHECK(back.refusal.empty());
  CHECK(back.damages.empty());
  CHECK(back.records == sample_records());
  CHECK(back.head.configuration == sample_head().configuration);
}

TEST_CASE("a capture cut at every length is read up to the cut") {
  const std::vector<Kept> records = sample_records();
  const Written written = write(sample_head(), records);
  const std::size_t section_end = u32(written.bytes, 4);
  for (std::size_t length = 0; length < written.bytes.size(); ++length) {
    INFO("cut at " << length);
    const ReadBack back = read(std::span(written.bytes).first(length));
    if (length < section_end) {
      CHECK_FALSE(back.refusal.empty());
      continue;
    }
    CHECK(back.refusal.empty());
    CHECK(back.head.configuration == sample_head().configuration);
    std::size_t whole = 0;
    while (whole < records.size() && written.block_ends[whole + 1] <= length) ++whole;
    CHECK(back.records == std::vector<Kept>(records.begin(), records.begin() + static_cast<std::ptrdiff_t>(whole)));

    std::size_t last_end = 0;
    while (last_end < length && last_end + u32(written.bytes, last_end + 4) <= length)
      last_end += u32(written.bytes, last_end + 4);
    if (last_end == length) {
      CHECK(back.damages.empty());
      continue;
    }
    REQUIRE(back.damages.size() == 1);
    CHECK(back.damages[0].offset == last_end);
    CHECK(back.damages[0].bytes_lost == length - last_end);
    const std::size_t block = u32(written.bytes, last_end + 4);
    const std::string expected = length - last_end < 8 ? "the file ends within a block"
                                                       : fmt::format("the file ends within a block of {} bytes", block);
    CHECK(back.damages[0].reason == expected);
  }
}

TEST_CASE("a capture flipped at every bit loses the block it is in and nothing else") {
  const std::vector<Kept> records = sample_records();
  const Written written = write(sample_head(), records);
  const std::size_t section_end = u32(written.bytes, 4);
  for (std::size_t bit = 0; bit < 8 * written.bytes.size(); ++bit) {
    const std::size_t at = bit / 8;
    INFO("bit " << bit % 8 << " of byte " << at);
    std::vector<std::byte> flipped = written.bytes;
    flipped[at] ^= std::byte{1} << (bit % 8);
    const ReadBack back = read(flipped);
    REQUIRE(back.refusal.empty());

    std::vector<Kept> expected = records;
    SourceId source_lost = 1000;
    std::size_t block = 0;
    while (block + u32(written.bytes, block + 4) <= at) block += u32(written.bytes, block + 4);
    if (const auto index = record_at(written, at)) {
      expected.erase(expected.begin() + static_cast<std::ptrdiff_t>(*index));
    } else if (block > 0) {
      source_lost = static_cast<SourceId>(block == section_end                                         ? 0
                                          : block == section_end + u32(written.bytes, section_end + 4) ? 1
                                                                                                       : 2);
      std::erase_if(expected, [&](const Kept& record) { return record.source == source_lost; });
    }
    CHECK(back.records == expected);
    CHECK(back.head_intact == (block > 0));
    REQUIRE_FALSE(back.damages.empty());
    CHECK(back.damages[0].offset == block);
    CHECK(back.damages[0].bytes_lost == u32(written.bytes, block + 4));
    const std::size_t records_lost = records.size() - expected.size();
    CHECK(back.damages.size() == (source_lost == 1000 ? 1 : 1 + records_lost));
  }
}

TEST_CASE("garbage between blocks is skipped and measured") {
  const std::vector<Kept> records = sample_records();
  const Written written = write(sample_head(), records);
  for (const std::size_t size : {1U, 2U, 3U, 4U, 5U, 100U, 400'000U}) {
    std::vector<std::byte> bytes = written.bytes;
    const std::size_t at = written.block_ends[2];
    bytes.insert(bytes.begin() + static_cast<std::ptrdiff_t>(at), size, std::byte{0x06});
    const ReadBack back = read(bytes);
    CHECK(back.records == records);
    REQUIRE(back.damages.size() == 1);
    CHECK(back.damages[0].offset == at);
    CHECK(back.damages[0].bytes_lost == size);
    CHECK(back.damages[0].reason == "no block, or one whose length is damaged");
  }
}

TEST_CASE("bytes taken out cost the blocks they were in") {
  constexpr std::size_t taken = 10;
  const std::vector<Kept> records = sample_records();
  const Written written = write(sample_head(), records);
  for (std::size_t at = written.block_ends[0]; at < written.block_ends[3]; ++at) {
    INFO("from byte " << at);
    std::vector<std::byte> bytes = written.bytes;
    // Where it makes no difference whether the hole is here or one byte on, nobody can say which block it hit.
    if (bytes[at] == bytes[at + taken] || bytes[at - 1] == bytes[at + taken - 1]) continue;
    const auto begin = bytes.begin() + static_cast<std::ptrdiff_t>(at);
    bytes.erase(begin, begin + taken);
    const std::size_t first = *record_at(written, at);
    const std::size_t last = *record_at(written, at + taken - 1);
    std::vector<Kept> expected = records;
    expected.erase(expected.begin() + static_cast<std::ptrdiff_t>(first),
                   expected.begin() + static_cast<std::ptrdiff_t>(last + 1));
    const ReadBack back = read(bytes);
    CHECK(back.records == expected);
    REQUIRE(back.damages.size() == 1);
    CHECK(back.damages[0].offset == written.block_ends[first]);
    CHECK(back.damages[0].bytes_lost == written.block_ends[last + 1] - written.block_ends[first] - taken);
  }
}

TEST_CASE("a block inside a datagram is never taken for a record") {
  const Written inner = write(sample_head(), sample_records());
  std::vector<Kept> records = sample_records();
  records[1].bytes.assign(inner.bytes.begin() + static_cast<std::ptrdiff_t>(inner.block_ends[0]), inner.bytes.end());
  Written written = write(sample_head(), records);
  written.bytes[written.block_ends[1] + 60] ^= std::byte{1};
  const ReadBack back = read(written.bytes);
  records.erase(records.begin() + 1);
  CHECK(back.records == records);
  REQUIRE(back.damages.size() == 1);
  CHECK(back.damages[0].reason == "a block whose check fails");
}

TEST_CASE("a record whose packet does not fit its hash is left out, though its block's check holds") {
  Written written = write(sample_head(), sample_records());
  const auto block =
      std::span(written.bytes).subspan(written.block_ends[2], written.block_ends[3] - written.block_ends[2]);
  block[format::packet_fixed] ^= std::byte{1};
  seal(block);
  const ReadBack back = read(written.bytes);
  REQUIRE(back.damages.size() == 1);
  CHECK(back.damages[0].offset == written.block_ends[2]);
  CHECK(back.damages[0].bytes_lost == block.size());
  CHECK(back.damages[0].reason == "a record whose hash fails");
  CHECK(back.records.size() == sample_records().size() - 1);
}

TEST_CASE("sizes that lie cannot be read beyond or ask for memory") {
  const Written good = write(sample_head(), sample_records());
  const auto lied = [&](std::size_t index, std::size_t field, std::uint32_t value) {
    std::vector<std::byte> bytes = good.bytes;
    const auto block =
        std::span(bytes).subspan(good.block_ends[index], good.block_ends[index + 1] - good.block_ends[index]);
    set_u32(block, field, value);
    seal(block);
    const ReadBack back = read(bytes);
    REQUIRE(back.damages.size() == 1);
    CHECK(back.records.size() == sample_records().size() - 1);
    return back.damages[0].reason;
  };
  CHECK(lied(1, 20, 0xFFFFFFFF) == "a record of 4294967295 bytes that its block of 100 cannot hold");
  CHECK(lied(1, 20, 70) == "a record of 70 bytes that its block of 100 cannot hold");
  CHECK(lied(1, 8, 0xFFFFFFFF) == "a record of source 4294967295, whose description is damaged or missing");
  CHECK(lied(1, 8, 3) == "a record of source 3, whose description is damaged or missing");
  CHECK(lied(1, format::packet_fixed, 0x46464646) == "a record whose hash fails");
  CHECK(lied(1, 4, 0xFFFFFFFC) == "no block, or one whose length is damaged");
}

TEST_CASE("captures joined end to end are read up to the join") {
  const Written written = write(sample_head(), sample_records());
  std::vector<std::byte> twice = written.bytes;
  twice.insert(twice.end(), written.bytes.begin(), written.bytes.end());
  const ReadBack back = read(twice);
  CHECK(back.records == sample_records());
  REQUIRE(back.damages.size() == 1);
  CHECK(back.damages[0].offset == written.bytes.size());
  CHECK(back.damages[0].bytes_lost == written.bytes.size());
  CHECK(back.damages[0].reason == "another capture begins here; a file holds one: split it");
}

TEST_CASE("what is no capture is named") {
  const auto refusal = [](std::initializer_list<unsigned> front, std::size_t zeros) {
    std::vector<std::byte> bytes;
    for (const unsigned value : front) bytes.push_back(static_cast<std::byte>(value));
    bytes.resize(bytes.size() + zeros);
    return read(bytes).refusal;
  };
  // Magic numbers of pcap, gzip (RFC 1952), zstd (RFC 8878) and xz: from memory.
  const std::string pcap = "a pcap file, not pcapng: convert it with editcap -F pcapng";
  CHECK(refusal({0xD4, 0xC3, 0xB2, 0xA1}, 20) == pcap);
  CHECK(refusal({0xA1, 0xB2, 0xC3, 0xD4}, 20) == pcap);
  CHECK(refusal({0x4D, 0x3C, 0xB2, 0xA1}, 20) == pcap);
  CHECK(refusal({0xA1, 0xB2, 0x3C, 0x4D}, 20) == pcap);
  CHECK(refusal({0x1F, 0x8B, 8, 0}, 20) == "a gzip file: unpack it first (gunzip)");
  CHECK(refusal({0x28, 0xB5, 0x2F, 0xFD}, 20) == "a zstd file: unpack it first (unzstd)");
  CHECK(refusal({0xFD, '7', 'z', 'X', 'Z', 0}, 20) == "an xz file: unpack it first (unxz)");
  CHECK(refusal({'{', '"', 'p', 'o', 's', 'i', 't', 'i', 'o', 'n', '"', ':'}, 0) == "a text file, not a pcapng file");
  CHECK(refusal({}, 0) == "an empty file");
  CHECK(refusal({0x7F, 'E', 'L', 'F'}, 100) == "not a pcapng file: it does not begin with 0a 0d 0d 0a");
}

TEST_CASE("a pcapng file of another program is refused as such") {
  // Section header and interface description as the standard has them, without our check.
  std::vector<std::byte> bytes;
  for (const std::uint32_t word : {0x0A0D0D0AU, 28U, 0x1A2B3C4DU, 1U, ~0U, ~0U, 28U, 1U, 20U, 1U, 0U, 20U}) {
    bytes.resize(bytes.size() + 4);
    set_u32(bytes, bytes.size() - 4, word);
  }
  CHECK(
      read(bytes).refusal ==
      "a pcapng file, but no capture of this program's kind, or one cut or damaged in its head: no block, or one whose "
      "length is damaged");
}

TEST_CASE("a later format is refused, not guessed at") {
  Written written = write(sample_head(), sample_records());
  std::string text(written.bytes.size(), ' ');
  std::memcpy(text.data(), written.bytes.data(), text.size());
  const std::size_t at = text.find("format 1");
  written.bytes[at + 7] = std::byte{'2'};
  seal(std::span(written.bytes).first(u32(written.bytes, 4)));
  CHECK(read(written.bytes).refusal == "a kedge capture, format 2, but this program reads format 1");
}

TEST_CASE("a missing part of the configuration is noticed") {
  CaptureHead head = sample_head();
  head.configuration.assign(150'000, 'c');
  Written written = write(head, {});
  std::string text(written.bytes.size(), ' ');
  std::memcpy(text.data(), written.bytes.data(), text.size());
  const std::size_t at = text.find("part 2 of 3");
  written.bytes[at + 5] = std::byte{'3'};
  seal(std::span(written.bytes).first(u32(written.bytes, 4)));
  CHECK(read(written.bytes).refusal == "its configuration has part 3 of 3 after part 1 of 3");
}
