// The logs of a folder, one type for each file. Columns and units as in the readers below; what a file
// may lack is an empty column.
#pragma once

#include <array>
#include <cstdint>
#include <filesystem>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "core/result.h"
#include "core/time.h"
#include "proto/packets.pb.h"
#include "scoring/csv.h"

namespace kedge::convert {

/// The tags met in the logs, in order of appearance, by the text in the column `tag`.
class TagList {
 public:
  std::size_t index_of(std::string_view text);
  [[nodiscard]] const std::vector<std::string>& names() const { return names_; }

 private:
  std::vector<std::string> names_;
  std::map<std::string, std::size_t, std::less<>> indices_;
};

/// What all logs have: a time for each row, and the tag it is of, unless the log is of all tags alike.
struct LogTable {
  scoring::CsvTable table;
  std::vector<TimeNs> times_ns;
  std::vector<std::size_t> tags;  ///< indices into the TagList; empty: each row is of every tag
};

struct AnchorRow {
  std::uint32_t anchor_id = 0;
  double east_m = 0.0;
  double north_m = 0.0;
  double up_m = 0.0;
};

/// anchors.csv: anchor, x_m, y_m, z_m.
[[nodiscard]] Result<std::vector<AnchorRow>> read_anchors(const std::filesystem::path& folder);

/// ranges.csv: t_s, tag, anchor, range_m; optional sigma_m, rssi_dbm (received power), rssi_fp_dbm or
/// fpp1_dbm (first path), and the counters of two-way ranging by a second reply, tx1_tick to rx3_tick, with
/// counter_bits (default 32), which are sent instead of range_m.
class RangeLog {
 public:
  [[nodiscard]] static Result<RangeLog> read(const std::filesystem::path& folder, TagList& tags);
  [[nodiscard]] const LogTable& log() const { return log_; }
  [[nodiscard]] std::uint32_t anchor(std::size_t row) const { return anchors_[row]; }
  void fill(std::size_t row, packets::v1::Packet& packet) const;

 private:
  explicit RangeLog(scoring::CsvTable table) : log_{std::move(table), {}, {}} {}

  LogTable log_;
  std::vector<std::uint32_t> anchors_;
  std::vector<double> range_m_;
  std::vector<double> sigma_m_;
  std::vector<double> received_dbm_;
  std::vector<double> first_path_dbm_;
  std::vector<double> counter_bits_;
  std::vector<std::optional<std::array<std::uint64_t, 6>>> counters_;
};

/// inertial.csv: t_s, gx, gy, gz in rad/s, ax, ay, az in m/s2; optional tag, mx, my, mz in uT, pressure_pa,
/// temperature_degc, battery_v. Sensor axes.
class InertialLog {
 public:
  /// Nothing where the folder has no such file.
  [[nodiscard]] static Result<std::optional<InertialLog>> read(const std::filesystem::path& folder, TagList& tags);
  [[nodiscard]] const LogTable& log() const { return log_; }
  void fill(std::size_t row, packets::v1::Packet& packet) const;

 private:
  explicit InertialLog(scoring::CsvTable table) : log_{std::move(table), {}, {}} {}

  LogTable log_;
  std::array<std::vector<double>, 3> angular_rate_radps_;
  std::array<std::vector<double>, 3> specific_force_mps2_;
  std::array<std::vector<double>, 3> magnetic_field_ut_;
  std::vector<double> pressure_pa_;
  std::vector<double> temperature_degc_;
  std::vector<double> battery_v_;
};

/// odometry.csv: t_s and either dist_m, dheading_rad (since the row before) or v_right_mps, v_left_mps,
/// wheel_distance_m; optional tag and interval_s (default: since the row before).
class TravelLog {
 public:
  /// Nothing where the folder has no such file.
  [[nodiscard]] static Result<std::optional<TravelLog>> read(const std::filesystem::path& folder, TagList& tags);
  [[nodiscard]] const LogTable& log() const { return log_; }
  void fill(std::size_t row, packets::v1::Packet& packet) const;

 private:
  explicit TravelLog(scoring::CsvTable table) : log_{std::move(table), {}, {}} {}
  Status find_intervals();

  LogTable log_;
  std::vector<double> interval_s_;
  std::vector<double> distance_m_;
  std::vector<double> turn_rad_;
};

}  // namespace kedge::convert
