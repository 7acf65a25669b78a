#include "capture/capture_writer.h"

#include <fmt/core.h>

#include <array>
#include <string_view>

#include "capture/block_builder.h"
#include "capture/udp_datagram.h"

namespace kedge::capture {

namespace {

/// Bytes of the front part of a text: at most configuration_part_bytes, not within a UTF-8 character.
std::size_t front_part(std::string_view text) {
  if (text.size() <= format::configuration_part_bytes) return text.size();
  constexpr std::size_t character_bytes_max = 4;
  for (std::size_t size = format::configuration_part_bytes;
       size > format::configuration_part_bytes - character_bytes_max; --size) {
    if ((static_cast<unsigned>(text[size]) & 0xC0U) != 0x80U) return size;
  }
  return format::configuration_part_bytes;  // not UTF-8: cut anywhere
}

std::vector<std::string_view> parts_of(std::string_view text) {
  std::vector<std::string_view> parts;
  while (!text.empty()) {
    const std::size_t size = front_part(text);
    parts.push_back(text.substr(0, size));
    text.remove_prefix(size);
  }
  return parts;
}

Status check_line(const char* what, std::string_view text) {
  if (text.size() > line_bytes_max) {
    return Error{
        fmt::format("{} of {} bytes is longer than the {} a capture holds", what, text.size(), line_bytes_max)};
  }
  if (text.find('\n') != std::string_view::npos) return Error{fmt::format("{} has more than one line", what)};
  return {};
}

Status check_head(const CaptureHead& head) {
  const std::array<std::pair<const char*, std::string_view>, 4> lines = {{{"the program name", head.program},
                                                                          {"the version", head.version},
                                                                          {"the build identification", head.build},
                                                                          {"the processor features", head.features}}};
  for (const auto& [what, text] : lines) {
    if (Status status = check_line(what, text); !status) return status;
  }
  if (head.version.find(' ') != std::string::npos) return Error{"the version has a space in it: " + head.version};
  if (head.links.size() > links_max) {
    return Error{fmt::format("{} links are more than the {} a capture holds", head.links.size(), links_max)};
  }
  for (const Link& link : head.links) {
    if (Status status = check_line("a link's name", link.name); !status) return status;
  }
  if (head.configuration.size() > configuration_bytes_max) {
    return Error{fmt::format("a configuration of {} bytes is longer than the {} a capture holds",
                             head.configuration.size(), configuration_bytes_max)};
  }
  return {};
}

std::span<const std::byte> section_block(std::vector<std::byte>& buffer, const CaptureHead& head) {
  BlockBuilder block(buffer, format::section_header);
  block.put(format::byte_order_magic);
  block.put(std::uint16_t{1});  // version 1.0
  block.put(std::uint16_t{0});
  block.put(~std::uint64_t{0});  // length of the section: unknown
  block.option(format::section_hardware, head.features);
  block.option(format::section_program, head.program + " " + head.version);
  block.option(format::option_comment, fmt::format("{}{}{}", format::head_title, format::build_label, head.build));
  const auto parts = parts_of(head.configuration);
  for (std::size_t i = 0; i < parts.size(); ++i) {
    block.option(format::option_comment,
                 fmt::format("{}{} of {}\n{}", format::configuration_title, i + 1, parts.size(), parts[i]));
  }
  return block.finish();
}

std::span<const std::byte> interface_block(std::vector<std::byte>& buffer, SourceId source, std::string_view name,
                                           std::uint16_t link_type, TimeNs utc_minus_monotonic_ns) {
  BlockBuilder block(buffer, format::interface_description);
  block.put(link_type);
  block.put(std::uint16_t{0});
  block.put(std::uint32_t{0});  // packets are never shortened
  block.option(format::interface_name, name);
  block.option(format::interface_resolution, std::span(&format::resolution_ns, 1));
  block.option(format::option_comment,
               fmt::format("{}{}\n{}{}", format::source_label, source, format::offset_label, utc_minus_monotonic_ns));
  return block.finish();
}

/// What stands in the packet: the datagram with its headers, or the bytes alone.
std::size_t packet_bytes(const Arrival& arrival) {
  return header_bytes(arrival.path.family) + arrival.record.bytes.size();
}

}  // namespace

Result<CaptureWriter> CaptureWriter::begin(ByteSink& sink, const CaptureHead& head) {
  if (Status status = check_head(head); !status) return Error{status.error()};
  CaptureWriter writer(sink);
  writer.links_ = head.links;
  writer.utc_minus_monotonic_ns_ = head.utc_minus_monotonic_ns;

  std::vector<std::byte> whole;
  const auto append = [&whole](std::span<const std::byte> block) {
    whole.insert(whole.end(), block.begin(), block.end());
  };
  append(section_block(writer.block_, head));
  append(interface_block(writer.block_, station_source, "station", format::link_type_station,
                         head.utc_minus_monotonic_ns));
  for (std::size_t i = 0; i < head.links.size(); ++i) {
    const bool udp = head.links[i].kind == LinkKind::udp;
    append(interface_block(writer.block_, static_cast<SourceId>(i + 1), head.links[i].name,
                           udp ? format::link_type_raw_ip : format::link_type_serial, head.utc_minus_monotonic_ns));
  }
  if (Status status = sink.write(whole); !status) return Error{status.error()};
  return writer;
}

Status CaptureWriter::write(const Arrival& arrival) {
  const RawRecord& record = arrival.record;
  if (record.source > links_.size()) {
    return Error{
        fmt::format("a record of source {}, but the capture names only 0 to {}", record.source, links_.size())};
  }
  const bool udp = record.source != station_source && links_[record.source - 1].kind == LinkKind::udp;
  if (udp != (arrival.path.family != Family::none)) {
    return Error{fmt::format("a record of source {} {} addresses", record.source, udp ? "without" : "with")};
  }
  const std::size_t bytes_max = udp ? payload_bytes_max(arrival.path.family) : record_bytes_max;
  if (record.bytes.size() > bytes_max) {
    return Error{fmt::format("a record of {} bytes is longer than the {} that source {} can have", record.bytes.size(),
                             bytes_max, record.source)};
  }

  // Unsigned, so that times before the epoch wrap and come back.
  const std::uint64_t stamp_ns =
      static_cast<std::uint64_t>(record.time_ns) + static_cast<std::uint64_t>(utc_minus_monotonic_ns_);
  BlockBuilder block(block_, format::enhanced_packet);
  block.put(record.source);
  block.put(static_cast<std::uint32_t>(stamp_ns >> 32U));
  block.put(static_cast<std::uint32_t>(stamp_ns));
  const auto size = static_cast<std::uint32_t>(packet_bytes(arrival));
  block.put(size);
  block.put(size);
  if (udp) {
    append_datagram(block_, arrival.path, record.bytes);
  } else {
    block_.insert(block_.end(), record.bytes.begin(), record.bytes.end());
  }
  std::array<std::byte, 5> hash{format::hash_crc32};
  const std::uint32_t crc = format::crc32_of(std::span(block_).subspan(format::packet_fixed));
  std::memcpy(hash.data() + 1, &crc, sizeof(crc));
  block.pad();
  block.option(format::packet_hash, hash);
  block.option(format::packet_id, std::as_bytes(std::span(&record.sequence, 1)));
  return sink_->write(block.finish());
}

Status CaptureWriter::flush() { return sink_->flush(); }

}  // namespace kedge::capture
