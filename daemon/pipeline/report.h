// What the engine publishes, in plain form: feed/ turns it into messages. Tags and anchors are
// indices into the settings. The order of reports is the canonical order; nothing in them depends on
// when they are published.
#pragma once

#include <array>
#include <cstdint>
#include <optional>
#include <string_view>

#include "core/ring.h"
#include "core/time.h"
#include "fusion/estimate.h"
#include "fusion/measurement.h"
#include "wire/packet.h"

namespace kedge::pipeline {

// Both enumerations have the numbers and words of proto/feed.proto.
enum class Standing : std::uint8_t { silent, waking, ring, twofold, loose, settled, coasting, lost };
enum class Concern : std::uint8_t {
  none,
  range_stale,
  inertial_stale,
  range_blocked,
  heading_disturbed,
  clock_unsteady,
  packets_missing,
  sensor_saturated,
  speed_disagrees,
  anchor_suspect,
  outside_site,
  too_uncertain,
  uncalibrated,
  overload,
  battery_low,
  anchor_silent,
  capture_failing,
  feed_losing,
  link_down,
};
inline constexpr std::size_t concern_count = 19;

struct ConcernState {
  Concern concern = Concern::none;
  TimeNs since_ns = 0;
  double figure = 0.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(concern, since_ns, figure);
  }
};

using Concerns = Ring<ConcernState, concern_count>;

/// Position and Speed of one tag: both messages come of it.
struct TrackReport {
  std::uint32_t tag = 0;
  Standing standing = Standing::silent;
  fusion::Estimate estimate;
  std::optional<double> radius_95_m;  ///< of the whole distribution, mirrors included
};

struct TagHealthReport {
  std::uint32_t tag = 0;
  TimeNs time_ns = 0;
  Standing standing = Standing::silent;
  TimeNs standing_since_ns = 0;
  Concerns concerns;
  double inertial_rate_hz = 0.0;
  double range_rate_hz = 0.0;
  double missing_share = 0.0;
  std::optional<double> inertial_age_s;
  std::optional<double> range_age_s;
  std::optional<double> battery_v;
  std::optional<double> temperature_degc;
  std::optional<double> clock_skew_ppm;
  std::uint64_t ranges_used = 0;
  std::uint64_t ranges_refused = 0;
  std::uint32_t restarts = 0;
};

struct AnchorHealthReport {
  std::uint32_t anchor = 0;
  TimeNs time_ns = 0;
  Concerns concerns;
  double range_rate_hz = 0.0;
  std::uint32_t tags_heard = 0;
  std::optional<double> age_s;
};

struct StationHealthReport {
  TimeNs time_ns = 0;
  Concerns concerns;
  std::uint64_t records = 0;
  std::uint64_t packets = 0;
  std::uint64_t packets_refused = 0;
  std::uint64_t unknown_device_packets = 0;
  std::uint32_t unknown_devices = 0;
  std::uint32_t links_open = 0;
  std::uint32_t links = 0;
  bool utc_synchronised = false;
};

struct PulseReport {
  TimeNs time_ns = 0;
};

/// What became of one packet or measurement.
enum class VerdictCode : std::uint8_t {
  used,
  noted,        ///< kept for a check or for later
  gated,        ///< innovation beyond the gate
  implausible,  ///< a figure no sensor can mean; the text names field and unit
  too_late,     ///< older than limits.delay_max_s allows
  from_future,  ///< its time lies after its arrival
  duplicate,    ///< this sequence number was seen
  unknown_device,
  unknown_anchor,
  beyond_range_max,
  malformed,  ///< not a packet at all
};

struct Verdict {
  TimeNs arrival_ns = 0;
  std::optional<TimeNs> time_ns;  ///< of the measurement, where it has one
  wire::DeviceId device_id = 0;
  std::optional<std::uint32_t> tag;
  VerdictCode code = VerdictCode::used;
  std::optional<fusion::Outcome> outcome;
  std::string_view text;  ///< valid during the call only; may be empty
};

/// Receives everything the engine has to say. Called from within Engine::accept.
class ReportSink {
 public:
  ReportSink() = default;
  ReportSink(const ReportSink&) = delete;
  ReportSink& operator=(const ReportSink&) = delete;
  virtual ~ReportSink() = default;

  virtual void utc_offset(TimeNs utc_minus_monotonic_ns) = 0;  ///< holds for all reports that follow
  virtual void publish(const TrackReport& report) = 0;
  virtual void publish(const TagHealthReport& report) = 0;
  virtual void publish(const AnchorHealthReport& report) = 0;
  virtual void publish(const StationHealthReport& report) = 0;
  virtual void publish(const PulseReport& report) = 0;
  virtual void verdict(const Verdict& verdict) = 0;
};

}  // namespace kedge::pipeline
