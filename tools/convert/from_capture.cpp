#include "convert/from_capture.h"

#include <fmt/core.h>

#include <cmath>
#include <limits>
#include <map>

#include "config/load.h"
#include "config/settings.h"
#include "convert/table_writer.h"
#include "core/physics.h"
#include "proto/packets.pb.h"
#include "wire/decode.h"
#include "wire/deframer.h"
#include "wire/encode.h"

namespace kedge::convert {

namespace {

constexpr float no_value = std::numeric_limits<float>::quiet_NaN();

/// "1" for a tag named tag1, as write_capture names them; other names as they are.
std::string table_name(const std::string& name) {
  constexpr std::string_view prefix = "tag";
  const std::string_view number = std::string_view(name).substr(std::min(prefix.size(), name.size()));
  const bool numbered =
      name.starts_with(prefix) && !number.empty() && number.find_first_not_of("0123456789") == std::string_view::npos;
  return numbered ? std::string(number) : name;
}

/// The range that two-way counters give, by the station's own decoder; NaN where they give none.
class Counters final : public wire::PacketSink {
 public:
  explicit Counters(double propagation_speed_mps) : decoder_(propagation_speed_mps) {}

  double range_m(const packets::v1::Packet& packet) {
    range_m_ = std::nan("");
    packets::v1::Datagram datagram;
    *datagram.add_packets() = packet;
    decoder_.decode(wire::encode(datagram), *this);
    return range_m_;
  }
  void packet(const wire::Packet& packet) override {
    if (const auto* range = std::get_if<wire::Range>(&packet.body)) range_m_ = range->range_m;
  }
  void refused(const wire::Refusal&) override {}

 private:
  wire::Decoder decoder_;
  double range_m_ = 0.0;
};

class Tables {
 public:
  Tables(const std::filesystem::path& folder, double propagation_speed_mps)
      : ranges_(folder / "ranges.csv",
                "t_s,tag,anchor,range_m,sigma_m,rssi_dbm,rssi_fp_dbm,tx1_tick,rx1_tick,tx2_tick,rx2_tick,tx3_tick,"
                "rx3_tick,counter_bits,device_time_us"),
        inertial_(folder / "inertial.csv",
                  "t_s,tag,gx,gy,gz,ax,ay,az,mx,my,mz,pressure_pa,temperature_degc,battery_v,device_time_us"),
        travel_(folder / "odometry.csv", "t_s,tag,interval_s,dist_m,dheading_rad,device_time_us"),
        anchors_(folder / "anchors.csv", "anchor,x_m,y_m,z_m"),
        counters_(propagation_speed_mps) {}

  void name_tags(const config::v1::Configuration& configuration) {
    for (const config::v1::Tag& tag : configuration.tags()) names_[tag.device_id()] = table_name(tag.name());
  }
  void add_anchors(const config::v1::Configuration& configuration) {
    for (const config::v1::Anchor& anchor : configuration.anchors()) {
      anchors_.count(std::uint64_t{anchor.anchor_id()});
      anchors_.number(anchor.east_m());
      anchors_.number(anchor.north_m());
      anchors_.number(anchor.up_m());
      anchors_.end_row();
    }
  }
  /// False where the bytes hold no packets.
  bool add(TimeNs arrival_ns, std::span<const std::byte> bytes) {
    if (!datagram_.ParseFromArray(bytes.data(), static_cast<int>(bytes.size()))) return false;
    for (const packets::v1::Packet& packet : datagram_.packets()) {
      if (packet.has_inertial()) add_inertial(arrival_ns, packet);
      if (packet.has_range()) add_range(arrival_ns, packet);
      if (packet.has_travel()) add_travel(arrival_ns, packet);
    }
    return datagram_.packets_size() > 0;
  }
  Status close() {
    for (TableWriter* table : {&ranges_, &inertial_, &travel_, &anchors_}) {
      if (Status status = table->close(); !status) return status;
    }
    return {};
  }
  void count(FromCapture& done) const {
    done.range_rows = ranges_.rows();
    done.inertial_rows = inertial_.rows();
    done.travel_rows = travel_.rows();
  }

 private:
  std::string name_of(std::uint32_t device_id) const {
    const auto found = names_.find(device_id);
    return found == names_.end() ? fmt::format("device{}", device_id) : found->second;
  }

  void add_inertial(TimeNs arrival_ns, const packets::v1::Packet& packet) {
    const packets::v1::Inertial& inertial = packet.inertial();
    const int count = inertial.specific_force_mps2_size() / 3;
    if (inertial.angular_rate_radps_size() < 3 * count) return;
    // As many as samples, or one for the last.
    const int first_field = count - inertial.magnetic_field_ut_size() / 3;
    for (int i = 0; i < count; ++i) {
      const TimeNs age_ns = TimeNs{count - 1 - i} * inertial.sample_interval_us() * ns_per_us;
      // Unsigned: times in a forged capture may lie at the end of the scale.
      inertial_.time(static_cast<TimeNs>(static_cast<std::uint64_t>(arrival_ns) - static_cast<std::uint64_t>(age_ns)));
      inertial_.cell(name_of(packet.device_id()));
      for (int axis = 0; axis < 3; ++axis) inertial_.number(inertial.angular_rate_radps(3 * i + axis));
      for (int axis = 0; axis < 3; ++axis) inertial_.number(inertial.specific_force_mps2(3 * i + axis));
      const bool has_field = first_field >= 0 && i >= first_field;
      for (int axis = 0; axis < 3; ++axis) {
        inertial_.number(has_field ? inertial.magnetic_field_ut(3 * (i - first_field) + axis) : no_value);
      }
      const bool last = i == count - 1;
      inertial_.number(last && inertial.has_pressure_pa() ? inertial.pressure_pa() : no_value);
      inertial_.number(last && inertial.has_temperature_degc() ? inertial.temperature_degc() : no_value);
      inertial_.number(last && inertial.has_battery_v() ? inertial.battery_v() : no_value);
      inertial_.count(packet.device_time_us() + static_cast<std::uint64_t>(i) * inertial.sample_interval_us());
      inertial_.end_row();
    }
  }

  void add_range(TimeNs arrival_ns, const packets::v1::Packet& packet) {
    const packets::v1::Range& range = packet.range();
    ranges_.time(arrival_ns);
    ranges_.cell(name_of(range.has_tag_device_id() ? range.tag_device_id() : packet.device_id()));
    ranges_.count(std::uint64_t{range.anchor_id()});
    if (range.has_two_way()) {
      const double range_m = counters_.range_m(packet);
      ranges_.cell(std::isnan(range_m) ? std::string() : fmt::format("{:.6f}", range_m));
    } else {
      ranges_.number(range.has_distance() ? range.distance().distance_m() : no_value);
    }
    ranges_.number(range.distance().has_sigma_m() ? range.distance().sigma_m() : no_value);
    ranges_.number(range.has_received_power_dbm() ? range.received_power_dbm() : no_value);
    ranges_.number(range.has_first_path_power_dbm() ? range.first_path_power_dbm() : no_value);
    if (range.two_way().has_second_reply()) {
      const packets::v1::SecondReply& stamps = range.two_way().second_reply();
      for (const std::uint64_t tick : {stamps.poll_tx(), stamps.poll_rx(), stamps.reply_tx(), stamps.reply_rx(),
                                       stamps.second_reply_tx(), stamps.second_reply_rx()}) {
        ranges_.count(tick);
      }
      ranges_.count(std::uint64_t{range.two_way().counter_bits()});
    } else {
      for (int i = 0; i < 7; ++i) ranges_.empty();
    }
    ranges_.count(packet.device_time_us());
    ranges_.end_row();
  }

  void add_travel(TimeNs arrival_ns, const packets::v1::Packet& packet) {
    const packets::v1::Travel& travel = packet.travel();
    travel_.time(arrival_ns);
    travel_.cell(name_of(packet.device_id()));
    travel_.cell(time_text(TimeNs{travel.interval_us()} * ns_per_us));
    travel_.number(travel.has_distance_m() ? travel.distance_m() : no_value);
    travel_.number(travel.has_turn_rad() ? travel.turn_rad() : no_value);
    travel_.count(packet.device_time_us());
    travel_.end_row();
  }

  TableWriter ranges_;
  TableWriter inertial_;
  TableWriter travel_;
  TableWriter anchors_;
  Counters counters_;
  std::map<std::uint32_t, std::string> names_;
  packets::v1::Datagram datagram_;
};

void take(const RawRecord& record, bool serial, std::map<SourceId, wire::Deframer>& deframers, Tables& tables,
          FromCapture& done) {
  if (!serial) {
    if (!tables.add(record.time_ns, record.bytes)) ++done.unreadable;
    return;
  }
  deframers[record.source].push(record.bytes, [&](std::span<const std::byte> datagram) {
    if (!tables.add(record.time_ns, datagram)) ++done.unreadable;
  });
}

}  // namespace

Result<FromCapture> write_tables(capture::CaptureReader& reader, const std::filesystem::path& folder) {
  if (Status status = prepare_folder(folder, {"ranges.csv", "inertial.csv", "odometry.csv", "anchors.csv"}); !status) {
    return Error{status.error()};
  }
  FromCapture done;
  const config::Loaded loaded = config::load_text(reader.head().configuration, "its configuration");
  if (!loaded.merged) {
    done.note = loaded.errors.front() + "; tags go by their device numbers, and there is no anchors.csv";
  }
  Tables tables(folder, loaded.merged ? config::settings_from(*loaded.merged).site.propagation_speed_mps
                                      : propagation_speed_mps_default);
  if (loaded.merged) {
    tables.name_tags(*loaded.merged);
    tables.add_anchors(*loaded.merged);
  }
  std::map<SourceId, wire::Deframer> deframers;
  capture::Arrival arrival;
  for (auto next = reader.next(arrival); next != capture::Next::end; next = reader.next(arrival)) {
    if (next == capture::Next::damage) {
      done.bytes_lost += reader.damage().bytes_lost;
      if (done.damages.size() < FromCapture::damages_shown_max) done.damages.push_back(reader.damage());
      continue;
    }
    ++done.records;
    const SourceId source = arrival.record.source;
    if (source == station_source) continue;
    const bool serial = reader.head().links[source - 1].kind == capture::LinkKind::serial;
    take(arrival.record, serial, deframers, tables, done);
  }
  for (const auto& [source, deframer] : deframers) {
    done.unreadable += deframer.counters().crc_failures + deframer.counters().malformed + deframer.counters().oversize;
  }
  tables.count(done);
  if (Status status = tables.close(); !status) return Error{status.error()};
  return done;
}

}  // namespace kedge::convert
