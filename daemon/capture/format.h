// The numbers of the format, for its writer and its reader; FORMAT.md explains them.
// Source: PCAP Next Generation (pcapng) Capture File Format, IETF draft-ietf-opsawg-pcapng (numbers
// from memory; tests/outside has tshark and capinfos read them).
#pragma once

#include <zlib.h>

#include <bit>
#include <cstddef>
#include <cstdint>
#include <cstring>
#include <span>
#include <string_view>

#include "capture/arrival.h"

namespace kedge::capture::format {

inline constexpr std::uint32_t section_header = 0x0A0D0D0A;
inline constexpr std::uint32_t interface_description = 1;
inline constexpr std::uint32_t enhanced_packet = 6;
inline constexpr std::uint32_t byte_order_magic = 0x1A2B3C4D;

inline constexpr std::uint16_t link_type_raw_ip = 101;
inline constexpr std::uint16_t link_type_serial = 147;   // USER0
inline constexpr std::uint16_t link_type_station = 148;  // USER1

inline constexpr std::uint16_t option_end = 0;
inline constexpr std::uint16_t option_comment = 1;
inline constexpr std::uint16_t section_hardware = 2;
inline constexpr std::uint16_t section_program = 4;
inline constexpr std::uint16_t interface_name = 2;
inline constexpr std::uint16_t interface_resolution = 9;
inline constexpr std::uint16_t packet_hash = 3;
inline constexpr std::uint16_t packet_id = 5;
// Codes from 0x8000 on are for local use. The last option of each block: CRC-32 of all before it.
inline constexpr std::uint16_t option_check = 0x8001;

inline constexpr std::byte hash_crc32{2};
inline constexpr std::byte resolution_ns{9};

// Sizes of the fixed parts, block type and first length included.
inline constexpr std::size_t section_fixed = 24;
inline constexpr std::size_t interface_fixed = 16;
inline constexpr std::size_t packet_fixed = 28;
// Check option, end of options, second length.
inline constexpr std::size_t block_tail = 16;

// What a reader accepts at most; a writer stays far below.
inline constexpr std::size_t section_bytes_max = configuration_bytes_max + (1U << 20U);
inline constexpr std::size_t interface_bytes_max = 16U << 10U;
inline constexpr std::size_t packet_bytes_max = record_bytes_max + 1024;

// The texts of the comments; numbers and words follow each.
inline constexpr std::string_view head_title = "kedge capture, format 1\n";
inline constexpr std::string_view head_title_any = "kedge capture, format ";
inline constexpr std::string_view build_label = "build: ";
inline constexpr std::string_view configuration_title = "kedge configuration, part ";
inline constexpr std::string_view source_label = "source: ";
inline constexpr std::string_view offset_label = "utc_minus_monotonic_ns: ";
inline constexpr std::size_t configuration_part_bytes = 60'000;

constexpr std::size_t padded(std::size_t size) { return (size + 3U) & ~std::size_t{3}; }

/// CRC-32 of IEEE 802.3, going on from an earlier part's.
inline std::uint32_t crc32_of(std::span<const std::byte> bytes, std::uint32_t crc = 0) {
  // NOLINTNEXTLINE(cppcoreguidelines-pro-type-reinterpret-cast): zlib speaks unsigned char
  return static_cast<std::uint32_t>(::crc32_z(crc, reinterpret_cast<const Bytef*>(bytes.data()), bytes.size()));
}

template <class T>
T byte_swapped(T value) {
  T out = 0;
  for (std::size_t i = 0; i < sizeof(T); ++i) {
    out = static_cast<T>(static_cast<T>(out << 8U) | static_cast<T>(value & 0xFFU));
    value = static_cast<T>(value >> 8U);
  }
  return out;
}

/// An unsigned number at `at`; precondition: it lies within `bytes`.
template <class T>
T get(std::span<const std::byte> bytes, std::size_t at, bool big_endian) {
  static_assert(std::endian::native == std::endian::little);
  T value = 0;
  std::memcpy(&value, bytes.subspan(at, sizeof(T)).data(), sizeof(T));
  return big_endian ? byte_swapped(value) : value;
}

}  // namespace kedge::capture::format
