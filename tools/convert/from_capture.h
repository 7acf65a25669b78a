// A capture as tables: what devices sent, a row for each sample.
#pragma once

#include <cstdint>
#include <filesystem>
#include <string>
#include <vector>

#include "capture/capture_reader.h"
#include "core/result.h"

namespace kedge::convert {

struct FromCapture {
  std::uint64_t records = 0;
  std::uint64_t inertial_rows = 0;
  std::uint64_t range_rows = 0;
  std::uint64_t travel_rows = 0;
  std::uint64_t unreadable = 0;          ///< datagrams and serial frames that hold no packets
  std::vector<capture::Damage> damages;  ///< at most damages_shown_max
  std::uint64_t bytes_lost = 0;
  std::string note;  ///< about the configuration; empty: all well

  static constexpr std::size_t damages_shown_max = 20;
};

/// Writes ranges.csv, inertial.csv, odometry.csv (those that have rows) and anchors.csv, which
/// write_capture's folders have too. `t_s` is the time of arrival at the station, for the samples of a batch the
/// last one's less the intervals; device_time_us is the device's own clock. Two-way counters come with the range they
/// give; the columns tx1_tick to rx3_tick hold those of a second reply. Fails when the tables cannot be
/// written.
[[nodiscard]] Result<FromCapture> write_tables(capture::CaptureReader& reader, const std::filesystem::path& folder);

}  // namespace kedge::convert
