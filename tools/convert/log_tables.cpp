#include "convert/log_tables.h"

#include <fmt/core.h>

#include <algorithm>
#include <charconv>
#include <cmath>

#include "config/source.h"
#include "convert/columns.h"

namespace kedge::convert {

namespace {

using scoring::CsvTable;

constexpr double counter_bits_default = 32;

/// NAME.csv or NAME.csv.gz; nothing where there is neither.
Result<std::optional<CsvTable>> find_table(const std::filesystem::path& folder, const std::string& name) {
  const std::filesystem::path plain = folder / (name + ".csv");
  const std::filesystem::path packed = folder / (name + ".csv.gz");
  const bool has_plain = std::filesystem::exists(plain);
  const bool has_packed = std::filesystem::exists(packed);
  if (has_plain && has_packed) {
    return Error{
        fmt::format("{} and {} are both there; remove the one that is not meant", plain.string(), packed.string())};
  }
  if (!has_plain && !has_packed) return std::optional<CsvTable>();
  Result<CsvTable> table = CsvTable::read(has_plain ? plain : packed);
  if (!table) return Error{table.error()};
  return std::optional(*std::move(table));
}

Result<CsvTable> need_table(const std::filesystem::path& folder, const std::string& name) {
  auto table = find_table(folder, name);
  if (!table) return Error{table.error()};
  if (!*table) return Error{fmt::format("{}: no {}.csv or {}.csv.gz in it", folder.string(), name, name)};
  return **std::move(table);
}

void read_tags(Columns& columns, TagList& list, LogTable& log) {
  const std::vector<std::string_view> texts = columns.texts("tag");
  for (std::size_t row = 0; row < texts.size(); ++row) {
    if (!config::is_name(texts[row])) {
      return columns.fail(fmt::format(
          "{}: column 'tag' holds {}; a tag is a number or a name of 1 to 32 of a to z, 0 to 9, '_' and '-'",
          log.table.place(row), config::in_quotes(texts[row])));
    }
    log.tags.push_back(list.index_of(texts[row]));
  }
}

std::array<std::vector<double>, 3> three(Columns& columns, std::array<const char*, 3> names, bool needed) {
  std::array<std::vector<double>, 3> values;
  for (std::size_t axis = 0; axis < 3; ++axis) {
    values[axis] = needed ? columns.required(names[axis]) : columns.optional(names[axis]);
  }
  return values;
}

void set_if_known(double value, auto set) {
  if (!std::isnan(value)) set(static_cast<float>(value));
}

}  // namespace

std::size_t TagList::index_of(std::string_view text) {
  const auto found = indices_.find(text);
  if (found != indices_.end()) return found->second;
  names_.emplace_back(text);
  indices_.emplace(text, names_.size() - 1);
  return names_.size() - 1;
}

Result<std::vector<AnchorRow>> read_anchors(const std::filesystem::path& folder) {
  const auto table = need_table(folder, "anchors");
  if (!table) return Error{table.error()};
  Columns columns(*table);
  const auto ids = columns.numbers_32("anchor");
  const auto position_m = three(columns, {"x_m", "y_m", "z_m"}, true);
  if (!columns.status()) return Error{columns.status().error()};
  std::vector<AnchorRow> anchors;
  for (std::size_t row = 0; row < table->rows(); ++row) {
    anchors.push_back({ids[row], position_m[0][row], position_m[1][row], position_m[2][row]});
  }
  return anchors;
}

Result<RangeLog> RangeLog::read(const std::filesystem::path& folder, TagList& tags) {
  auto table = need_table(folder, "ranges");
  if (!table) return Error{table.error()};
  RangeLog ranges(*std::move(table));
  LogTable& log = ranges.log_;
  Columns columns(log.table);
  log.times_ns = columns.times_ns();
  read_tags(columns, tags, log);
  ranges.anchors_ = columns.numbers_32("anchor");
  const bool counters = columns.has("tx1_tick");
  ranges.range_m_ = counters ? columns.optional("range_m") : columns.required("range_m");
  ranges.sigma_m_ = columns.optional("sigma_m");
  ranges.received_dbm_ = columns.optional("rssi_dbm");
  ranges.first_path_dbm_ = columns.optional(columns.has("rssi_fp_dbm") ? "rssi_fp_dbm" : "fpp1_dbm");
  ranges.counter_bits_ = columns.optional("counter_bits");
  if (counters) {
    constexpr std::array<const char*, 6> names = {"tx1_tick", "rx1_tick", "tx2_tick",
                                                  "rx2_tick", "tx3_tick", "rx3_tick"};
    ranges.counters_.resize(log.table.rows());
    for (std::size_t i = 0; i < names.size(); ++i) {
      const auto cells = columns.texts(names[i]);
      for (std::size_t row = 0; row < cells.size(); ++row) {
        auto& stamps = ranges.counters_[row];
        if (i == 0 && !cells[row].empty()) stamps.emplace();
        if (!stamps && cells[row].empty()) continue;
        std::uint64_t value = 0;
        const char* end = cells[row].data() + cells[row].size();
        const auto parsed = std::from_chars(cells[row].data(), end, value);
        if (!stamps || cells[row].empty() || parsed.ec != std::errc{} || parsed.ptr != end) {
          columns.fail(fmt::format("{}: column '{}' must hold a whole number of ticks, or all six counters be empty",
                                   log.table.place(row), names[i]));
          break;
        }
        (*stamps)[i] = value;
      }
    }
  }
  if (!columns.status()) return Error{columns.status().error()};
  for (std::size_t row = 0; row < log.table.rows(); ++row) {
    const bool counted = counters && ranges.counters_[row];
    if (!counted && std::isnan(value_at(ranges.range_m_, row))) {
      return Error{fmt::format("{}: neither range_m nor counters", log.table.place(row))};
    }
    const double bits = value_at(ranges.counter_bits_, row);
    if (!std::isnan(bits) && (bits < 16 || bits > 64 || bits != std::floor(bits))) {
      return Error{
          fmt::format("{}: column 'counter_bits' holds {:g}; it must be 16 to 64", log.table.place(row), bits)};
    }
  }
  return ranges;
}

void RangeLog::fill(std::size_t row, packets::v1::Packet& packet) const {
  packets::v1::Range& range = *packet.mutable_range();
  range.set_anchor_id(anchors_[row]);
  set_if_known(value_at(received_dbm_, row), [&](float value) { range.set_received_power_dbm(value); });
  set_if_known(value_at(first_path_dbm_, row), [&](float value) { range.set_first_path_power_dbm(value); });
  if (!counters_.empty() && counters_[row]) {
    const double bits = value_at(counter_bits_, row);
    range.mutable_two_way()->set_counter_bits(
        static_cast<std::uint32_t>(std::isnan(bits) ? counter_bits_default : bits));
    packets::v1::SecondReply& stamps = *range.mutable_two_way()->mutable_second_reply();
    const auto& [tx1, rx1, tx2, rx2, tx3, rx3] = *counters_[row];
    stamps.set_poll_tx(tx1);
    stamps.set_poll_rx(rx1);
    stamps.set_reply_tx(tx2);
    stamps.set_reply_rx(rx2);
    stamps.set_second_reply_tx(tx3);
    stamps.set_second_reply_rx(rx3);
    return;
  }
  range.mutable_distance()->set_distance_m(static_cast<float>(range_m_[row]));
  set_if_known(value_at(sigma_m_, row), [&](float value) { range.mutable_distance()->set_sigma_m(value); });
}

Result<std::optional<InertialLog>> InertialLog::read(const std::filesystem::path& folder, TagList& tags) {
  auto table = find_table(folder, "inertial");
  if (!table) return Error{table.error()};
  if (!*table) return std::optional<InertialLog>();
  InertialLog inertial(**std::move(table));
  LogTable& log = inertial.log_;
  Columns columns(log.table);
  log.times_ns = columns.times_ns();
  if (columns.has("tag")) read_tags(columns, tags, log);
  inertial.angular_rate_radps_ = three(columns, {"gx", "gy", "gz"}, true);
  inertial.specific_force_mps2_ = three(columns, {"ax", "ay", "az"}, true);
  inertial.magnetic_field_ut_ = three(columns, {"mx", "my", "mz"}, false);
  for (const char* axis : {"mx", "my", "mz"}) {
    // All three or none: asking for the one that is not there says so.
    if (!columns.has(axis) && (columns.has("mx") || columns.has("my") || columns.has("mz"))) columns.required(axis);
  }
  inertial.pressure_pa_ = columns.optional("pressure_pa");
  inertial.temperature_degc_ = columns.optional("temperature_degc");
  inertial.battery_v_ = columns.optional("battery_v");
  if (!columns.status()) return Error{columns.status().error()};
  return std::optional(std::move(inertial));
}

void InertialLog::fill(std::size_t row, packets::v1::Packet& packet) const {
  packets::v1::Inertial& inertial = *packet.mutable_inertial();
  bool has_field = true;
  for (std::size_t axis = 0; axis < 3; ++axis) {
    inertial.add_specific_force_mps2(static_cast<float>(specific_force_mps2_[axis][row]));
    inertial.add_angular_rate_radps(static_cast<float>(angular_rate_radps_[axis][row]));
    has_field = has_field && !std::isnan(value_at(magnetic_field_ut_[axis], row));
  }
  for (std::size_t axis = 0; has_field && axis < 3; ++axis) {
    inertial.add_magnetic_field_ut(static_cast<float>(magnetic_field_ut_[axis][row]));
  }
  set_if_known(value_at(pressure_pa_, row), [&](float value) { inertial.set_pressure_pa(value); });
  set_if_known(value_at(temperature_degc_, row), [&](float value) { inertial.set_temperature_degc(value); });
  set_if_known(value_at(battery_v_, row), [&](float value) { inertial.set_battery_v(value); });
}

Result<std::optional<TravelLog>> TravelLog::read(const std::filesystem::path& folder, TagList& tags) {
  auto table = find_table(folder, "odometry");
  if (!table) return Error{table.error()};
  if (!*table) return std::optional<TravelLog>();
  TravelLog travel(**std::move(table));
  LogTable& log = travel.log_;
  Columns columns(log.table);
  log.times_ns = columns.times_ns();
  if (columns.has("tag")) read_tags(columns, tags, log);
  travel.interval_s_ = columns.optional("interval_s");
  const bool wheels = columns.has("v_right_mps");
  const auto right_mps = wheels ? columns.required("v_right_mps") : std::vector<double>();
  const auto left_mps = wheels ? columns.required("v_left_mps") : std::vector<double>();
  const auto wheel_distance_m = wheels ? columns.required("wheel_distance_m") : std::vector<double>();
  if (!wheels && !columns.has("dist_m") && !columns.has("dheading_rad")) {
    columns.required("dist_m");
  }
  travel.distance_m_ = columns.optional("dist_m");
  travel.turn_rad_ = columns.optional("dheading_rad");
  if (!columns.status()) return Error{columns.status().error()};
  if (Status status = travel.find_intervals(); !status) return Error{status.error()};
  if (wheels) {
    travel.distance_m_.clear();
    travel.turn_rad_.clear();
    for (std::size_t row = 0; row < log.table.rows(); ++row) {
      const double interval_s = travel.interval_s_[row];
      if (!(wheel_distance_m[row] > 0.0)) {
        return Error{fmt::format("{}: column 'wheel_distance_m' holds {:g} m; it must be above 0", log.table.place(row),
                                 wheel_distance_m[row])};
      }
      travel.distance_m_.push_back(0.5 * (right_mps[row] + left_mps[row]) * interval_s);
      travel.turn_rad_.push_back((right_mps[row] - left_mps[row]) / wheel_distance_m[row] * interval_s);
    }
  }
  return std::optional(std::move(travel));
}

Status TravelLog::find_intervals() {
  if (interval_s_.empty()) interval_s_.assign(log_.table.rows(), std::nan(""));
  std::map<std::size_t, std::size_t> last_row;  // of each tag
  for (std::size_t row = 0; row < interval_s_.size(); ++row) {
    const std::size_t tag = log_.tags.empty() ? 0 : log_.tags[row];
    const auto [before, first] = last_row.try_emplace(tag, row);
    if (first) continue;
    const double interval_s = seconds(log_.times_ns[row] - log_.times_ns[before->second]);
    if (!(interval_s > 0.0)) {
      return Error{fmt::format("{}: column 't_s' does not rise from {}", log_.table.place(row),
                               log_.table.place(before->second))};
    }
    if (std::isnan(interval_s_[row])) interval_s_[row] = interval_s;
    // The first row of a tag has none before it: such logs are even, so the next interval stands for it.
    if (std::isnan(interval_s_[before->second])) interval_s_[before->second] = interval_s;
    before->second = row;
  }
  const auto missing = std::find_if(interval_s_.begin(), interval_s_.end(), [](double s) { return std::isnan(s); });
  if (missing == interval_s_.end()) return {};
  return Error{fmt::format("{}: the only row of its tag says nothing of its interval; add a column interval_s",
                           log_.table.place(static_cast<std::size_t>(missing - interval_s_.begin())))};
}

void TravelLog::fill(std::size_t row, packets::v1::Packet& packet) const {
  packets::v1::Travel& travel = *packet.mutable_travel();
  // Beyond what 32 bits hold it is refused at the door anyway.
  travel.set_interval_us(static_cast<std::uint32_t>(std::clamp(std::round(interval_s_[row] * 1e6), 0.0, 4e9)));
  set_if_known(value_at(distance_m_, row), [&](float value) { travel.set_distance_m(value); });
  set_if_known(value_at(turn_rad_, row), [&](float value) { travel.set_turn_rad(value); });
}

}  // namespace kedge::convert
