#include "capture/capture_reader.h"

#include <fmt/core.h>

#include <algorithm>
#include <charconv>
#include <string_view>

#include "capture/format.h"
#include "capture/option_reader.h"
#include "capture/udp_datagram.h"

namespace kedge::capture {

namespace {

using Bytes = std::span<const std::byte>;

// Damages that open() remembers before it leaves the rest to next().
constexpr std::size_t pending_max = 16;

std::string_view text_of(Bytes bytes) {
  // NOLINTNEXTLINE(cppcoreguidelines-pro-type-reinterpret-cast): bytes seen as text
  return {reinterpret_cast<const char*>(bytes.data()), bytes.size()};
}

bool starts_with(Bytes bytes, std::initializer_list<unsigned> magic) {
  return bytes.size() >= magic.size() &&
         std::equal(magic.begin(), magic.end(), bytes.begin(),
                    [](unsigned value, std::byte byte) { return value == std::to_integer<unsigned>(byte); });
}

/// What a file is that begins like this, if it is something well known, and what to do about it.
const char* other_kind(Bytes front) {
  if (starts_with(front, {0xA1, 0xB2, 0xC3, 0xD4}) || starts_with(front, {0xD4, 0xC3, 0xB2, 0xA1}) ||
      starts_with(front, {0xA1, 0xB2, 0x3C, 0x4D}) || starts_with(front, {0x4D, 0x3C, 0xB2, 0xA1})) {
    return "a pcap file, not pcapng: convert it with editcap -F pcapng";
  }
  if (starts_with(front, {0x1F, 0x8B})) return "a gzip file: unpack it first (gunzip)";
  if (starts_with(front, {0x28, 0xB5, 0x2F, 0xFD})) return "a zstd file: unpack it first (unzstd)";
  if (starts_with(front, {0xFD, 0x37, 0x7A, 0x58, 0x5A})) return "an xz file: unpack it first (unxz)";
  const bool text = std::all_of(front.begin(), front.end(), [](std::byte byte) {
    const auto c = std::to_integer<unsigned>(byte);
    return (c >= 0x20 && c < 0x7F) || c == '\r' || c == '\n' || c == '\t';
  });
  return text ? "a text file, not a pcapng file" : nullptr;
}

bool take_prefix(std::string_view& text, std::string_view prefix) {
  if (!text.starts_with(prefix)) return false;
  text.remove_prefix(prefix.size());
  return true;
}

template <class Number>
bool take_number(std::string_view& text, Number& number) {
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), number);
  if (error != std::errc{}) return false;
  text.remove_prefix(static_cast<std::size_t>(end - text.data()));
  return true;
}

/// One part of the configuration: "1 of 3", a line break, text.
Status take_part(std::string_view text, std::size_t& part, std::size_t& parts, std::string& configuration) {
  std::size_t number = 0;
  std::size_t count = 0;
  if (!take_number(text, number) || !take_prefix(text, " of ") || !take_number(text, count) ||
      !take_prefix(text, "\n")) {
    return Error{"its configuration has a part without number"};
  }
  if (number != part + 1 || (part > 0 && count != parts)) {
    return Error{fmt::format("its configuration has part {} of {} after part {} of {}", number, count, part, parts)};
  }
  part = number;
  parts = count;
  configuration += text;
  return {};
}

}  // namespace

Result<CaptureReader> CaptureReader::open(ByteSource& source) {
  CaptureReader reader(source);
  const Bytes front = reader.blocks_.front(12);
  if (front.empty() && reader.blocks_.failure().empty()) return Error{"an empty file"};
  if (const char* kind = front.empty() ? nullptr : other_kind(front)) return Error{kind};
  const bool pcapng = starts_with(front, {0x0A, 0x0D, 0x0D, 0x0A});
  if (Status status = reader.read_head(); !status) return Error{status.error()};
  if (reader.blocks_.any_good()) return reader;

  if (!reader.blocks_.failure().empty()) return Error{reader.blocks_.failure()};
  if (!pcapng) return Error{"not a pcapng file: it does not begin with 0a 0d 0d 0a"};
  return Error{
      fmt::format("a pcapng file, but no capture of this program's kind, or one cut or damaged in its head: {}",
                  reader.pending_.empty() ? "nothing follows" : reader.pending_.front().reason)};
}

Status CaptureReader::read_head() {
  Block block;
  while (pending_.size() < pending_max) {
    switch (blocks_.next(block)) {
      case BlockReader::Next::end:
        return {};
      case BlockReader::Next::damage:
        if (!pending_.empty() && pending_.back().offset + pending_.back().bytes_lost == blocks_.damage().offset) {
          pending_.back().bytes_lost += blocks_.damage().bytes_lost;
        } else {
          pending_.push_back(blocks_.damage());
        }
        break;
      case BlockReader::Next::block:
        if (block.type == format::section_header && block.offset == 0) {
          if (Status status = take_section(block); !status) return status;
        } else if (block.type == format::interface_description) {
          if (Status status = take_interface(block); !status) return status;
        } else {
          ahead_ = block;
          return {};
        }
    }
  }
  return {};
}

Next CaptureReader::damaged(Damage damage) {
  damage_ = std::move(damage);
  return Next::damage;
}

Next CaptureReader::next(Arrival& arrival) {
  if (told_ < pending_.size()) return damaged(pending_[told_++]);
  for (;;) {
    Block block;
    if (ahead_) {
      block = *ahead_;
      ahead_.reset();
    } else {
      const BlockReader::Next found = blocks_.next(block);
      if (found == BlockReader::Next::end) return Next::end;
      if (found == BlockReader::Next::damage) return damaged(blocks_.damage());
    }
    switch (block.type) {
      case format::enhanced_packet:
        if (Status status = take_packet(block, arrival); !status) {
          return damaged({block.offset, block.bytes.size(), status.error()});
        }
        return Next::record;
      case format::section_header:
      case format::interface_description:
        return damaged(blocks_.lose_rest("another capture begins here; a file holds one: split it"));
      default:
        break;  // a kind that a later version may add
    }
  }
}

Status CaptureReader::take_section(const Block& block) {
  std::size_t part = 0;
  std::size_t parts = 0;
  OptionReader option(block.options(format::section_fixed), blocks_.big_endian());
  while (option.next()) {
    std::string_view text = text_of(option.value());
    if (option.code() == format::section_hardware) {
      head_.features = text;
    } else if (option.code() == format::section_program) {
      const std::size_t space = std::min(text.rfind(' '), text.size());
      head_.program = text.substr(0, space);
      head_.version = text.substr(std::min(space + 1, text.size()));
    } else if (option.code() != format::option_comment) {
      continue;
    } else if (take_prefix(text, format::head_title)) {
      if (take_prefix(text, format::build_label)) head_.build = text;
      head_intact_ = true;
    } else if (text.starts_with(format::head_title_any)) {
      return Error{fmt::format("a {}, but this program reads format 1", text.substr(0, text.find('\n')))};
    } else if (take_prefix(text, format::configuration_title)) {
      if (Status status = take_part(text, part, parts, head_.configuration); !status) return status;
    }
  }
  if (!head_intact_) return Error{"its head says no format: a capture says \"kedge capture, format 1\""};
  if (part != parts) return Error{fmt::format("its configuration ends at part {} of {}", part, parts)};
  return {};
}

Status CaptureReader::take_interface(const Block& block) {
  Interface interface;
  SourceId source = 0;
  bool described = false;
  OptionReader option(block.options(format::interface_fixed), blocks_.big_endian());
  while (option.next()) {
    std::string_view text = text_of(option.value());
    if (option.code() == format::interface_name) interface.link.name = text;
    if (option.code() == format::option_comment && take_prefix(text, format::source_label)) {
      described = take_number(text, source) && take_prefix(text, "\n") && take_prefix(text, format::offset_label) &&
                  take_number(text, interface.utc_minus_monotonic_ns) && text.empty();
    }
  }
  if (!described || source > links_max) {
    return Error{
        fmt::format("its interface at byte {} does not say which source it is (0 to {})", block.offset, links_max)};
  }
  const auto link_type = format::get<std::uint16_t>(block.bytes, 8, blocks_.big_endian());
  const bool known = source == station_source
                         ? link_type == format::link_type_station
                         : link_type == format::link_type_raw_ip || link_type == format::link_type_serial;
  if (!known) return Error{fmt::format("its interface of source {} has link type {}", source, link_type)};
  interface.link.kind = link_type == format::link_type_raw_ip ? LinkKind::udp : LinkKind::serial;

  if (interfaces_.size() <= source) interfaces_.resize(source + 1);
  if (interfaces_[source]) {
    return Error{fmt::format("another capture begins at byte {}; a file holds one: split it", block.offset)};
  }
  if (std::none_of(interfaces_.begin(), interfaces_.end(), [](const auto& i) { return i.has_value(); })) {
    head_.utc_minus_monotonic_ns = interface.utc_minus_monotonic_ns;
  }
  interfaces_[source] = interface;
  head_.links.resize(interfaces_.size() - 1);
  if (source != station_source) head_.links[source - 1] = interface.link;
  return {};
}

Status CaptureReader::take_packet(const Block& block, Arrival& arrival) {
  const bool big = blocks_.big_endian();
  const auto u32 = [&](std::size_t at) { return format::get<std::uint32_t>(block.bytes, at, big); };
  const SourceId source = u32(8);
  if (source >= interfaces_.size() || !interfaces_[source]) {
    return Error{fmt::format("a record of source {}, whose description is damaged or missing", source)};
  }
  const Interface& interface = *interfaces_[source];
  const std::size_t size = u32(20);
  if (size != u32(24) || format::padded(size) > block.options(format::packet_fixed).size()) {
    return Error{fmt::format("a record of {} bytes that its block of {} cannot hold", size, block.bytes.size())};
  }
  Bytes bytes = block.bytes.subspan(format::packet_fixed, size);

  bool hashed = false;
  std::optional<std::uint64_t> sequence;
  OptionReader option(block.options(format::packet_fixed + format::padded(size)), big);
  while (option.next()) {
    const Bytes value = option.value();
    if (option.code() == format::packet_hash && value.size() == 5 && value[0] == format::hash_crc32) {
      hashed = format::get<std::uint32_t>(value, 1, big) == format::crc32_of(bytes);
    } else if (option.code() == format::packet_id && value.size() == 8) {
      sequence = format::get<std::uint64_t>(value, 0, big);
    }
  }
  if (!hashed) return Error{"a record whose hash fails"};
  if (!sequence) return Error{"a record without its number"};

  arrival.path = {};
  if (source != station_source && interface.link.kind == LinkKind::udp) {
    const Result<Bytes> payload = split_datagram(bytes, arrival.path);
    if (!payload) return Error{payload.error()};
    bytes = *payload;
  }
  const std::uint64_t stamp_ns = (std::uint64_t{u32(12)} << 32U) | u32(16);
  arrival.record = {static_cast<TimeNs>(stamp_ns - static_cast<std::uint64_t>(interface.utc_minus_monotonic_ns)),
                    source, *sequence, bytes};
  return {};
}

}  // namespace kedge::capture
