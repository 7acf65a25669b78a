#include "pipeline/engine.h"

#include <fmt/format.h>

#include <algorithm>
#include <deque>
#include <iterator>
#include <limits>
#include <string_view>

#include "core/rotation.h"
#include "pipeline/anchor_watch.h"
#include "pipeline/correction.h"
#include "pipeline/device_book.h"
#include "pipeline/standing.h"
#include "pipeline/station_watch.h"
#include "proto/station.pb.h"
#include "wire/decode.h"
#include "wire/deframer.h"

namespace kedge::pipeline {
namespace {

/// Raised whenever the meaning of a saved state changes.
constexpr std::uint32_t state_version = 1;

/// A hundred years and more; room is left for sums of times.
constexpr TimeNs time_max_ns = TimeNs{1} << 62U;

/// One tag: its track and who watches over it.
struct TagUnit {
  TagUnit(const Settings& settings, const TagSettings& tag, const EstimatorFactory& factory, OutcomeSink outcome)
      : track(settings.site, tag.model, settings.limits, factory, std::move(outcome)),
        watch(settings.site, tag, settings.limits) {}

  Track track;
  TagWatch watch;
  TimeNs published_ns = std::numeric_limits<TimeNs>::min();  ///< time of the newest published estimate
  TimeNs health_ns = std::numeric_limits<TimeNs>::min();     ///< when Health was published last
  std::uint32_t restarts_told = 0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(watch, published_ns, health_ns, restarts_told);
  }
};

VerdictCode verdict_of(fusion::Outcome::Code code) {
  switch (code) {
    case fusion::Outcome::Code::used:
      return VerdictCode::used;
    case fusion::Outcome::Code::noted:
      return VerdictCode::noted;
    case fusion::Outcome::Code::gated:
      return VerdictCode::gated;
    case fusion::Outcome::Code::implausible:
      break;
  }
  return VerdictCode::implausible;
}

}  // namespace

class Engine::State : public wire::PacketSink {
 public:
  State(Settings given, ReportSink& sink, const EstimatorFactory& factory)
      : settings(std::move(given)),
        sink_(sink),
        decoder_(settings.site.propagation_speed_mps),
        deframers_(settings.links.size()),
        devices_(settings),
        station_(settings) {
    for (std::uint32_t tag = 0; tag < settings.tags.size(); ++tag) {
      tags_.emplace_back(
          settings, settings.tags[tag], factory,
          [this, tag](const Entry& entry, const fusion::Outcome& outcome) { came(tag, entry, outcome); });
    }
    for (std::size_t i = 0; i < settings.site.anchors.size(); ++i) anchors_.emplace_back(settings.limits, tags_.size());
  }

  void accept(const RawRecord& record) {
    station_.record();
    if (record.time_ns < 0 || record.time_ns > time_max_ns) {
      station_.refused();
      return tell(VerdictCode::malformed, 0, "a record whose time no monotonic clock can show");
    }
    now_ns_ = std::max(now_ns_, record.time_ns);
    arrival_ns_ = record.time_ns;
    if (record.source == station_source) return station_record(record.bytes);
    if (record.source > settings.links.size()) {
      station_.refused();
      return tell(VerdictCode::malformed, 0, "a record of a source that is not configured");
    }
    if (settings.links[record.source - 1].kind == LinkKind::udp) return decoder_.decode(record.bytes, *this);
    deframe(record);
  }

  void save(Saver& saver) {
    std::uint32_t version = state_version;
    saver(version);
    own_fields(saver);
    for (TagUnit& tag : tags_) {
      saver(tag);
      tag.track.save(saver);
    }
  }

  Status load(std::span<const std::byte> bytes) {
    Loader loader(bytes);
    std::uint32_t version = 0;
    loader(version);
    if (version != state_version) {
      return Error{fmt::format("engine state has version {}; this program reads version {}", version, state_version)};
    }
    own_fields(loader);
    for (TagUnit& tag : tags_) {
      loader(tag);
      tag.track.load(loader);
    }
    if (!loader.ok() || loader.left() != 0) {
      return Error{fmt::format("engine state of {} bytes does not fit this configuration of {} tags and {} anchors",
                               bytes.size(), tags_.size(), anchors_.size())};
    }
    return {};
  }

  // wire::PacketSink
  void packet(const wire::Packet& packet) override {
    station_.packet();
    Device* device = devices_.find(packet.device_id);
    if (device == nullptr) {
      devices_.note_unknown(packet.device_id);
      return tell(VerdictCode::unknown_device, packet.device_id, "no tag and no anchor has this device_id");
    }
    const auto* batch = std::get_if<wire::InertialBatch>(&packet.body);
    const std::uint32_t span_us = batch != nullptr ? (batch->count - 1) * batch->sample_interval_us : 0;
    const clock::Mapped mapped = device->clock.map(packet.device_time_us, span_us, arrival_ns_);
    if (mapped.event == clock::ClockEvent::restarted || mapped.event == clock::ClockEvent::stepped) {
      device->sequence.forget();
    }
    if (!device->sequence.note(packet.sequence, arrival_ns_, settings.limits.rate_window_ns)) {
      say("sequence number {} came before", packet.sequence);
      return tell(VerdictCode::duplicate, packet.device_id, said());
    }
    std::visit([&](const auto& body) { take(*device, mapped.time_ns, body); }, packet.body);
  }

  void refused(const wire::Refusal& refusal) override {
    station_.refused();
    tell(refusal.code == wire::RefusalCode::malformed ? VerdictCode::malformed : VerdictCode::implausible,
         refusal.device_id, refusal.text);
  }

  const Settings settings;

 private:
  template <class Archive>
  void own_fields(Archive& archive) {
    for (wire::Deframer& deframer : deframers_) archive(deframer);
    for (AnchorWatch& anchor : anchors_) archive(anchor);
    archive(devices_, station_, now_ns_, arrival_ns_, first_tick_ns_, anchors_health_ns_, station_health_ns_);
  }

  void deframe(const RawRecord& record) {
    wire::Deframer& deframer = deframers_[record.source - 1];
    const wire::DeframerCounters before = deframer.counters();
    deframer.push(record.bytes, [&](std::span<const std::byte> datagram) { decoder_.decode(datagram, *this); });
    const wire::DeframerCounters& after = deframer.counters();
    const std::uint64_t dropped = after.bytes_dropped - before.bytes_dropped;
    if (dropped == 0) return;
    station_.refused();
    say("link {}: {} bytes that are no frame ({} with a wrong check, {} malformed, {} too long): noise, another baud "
        "rate, or bytes lost",
        settings.links[record.source - 1].name, dropped, after.crc_failures - before.crc_failures,
        after.malformed - before.malformed, after.oversize - before.oversize);
    tell(VerdictCode::malformed, 0, said());
  }

  void take(const Device& device, TimeNs first_ns, const wire::InertialBatch& batch) {
    if (!device.tag)
      return tell(VerdictCode::unknown_device, device.device_id, "an anchor's device sent inertial data");
    const TagSettings& tag = settings.tags[*device.tag];
    TagUnit& unit = tags_[*device.tag];
    unit.watch.heard_inertial(batch, arrival_ns_);
    TimeNs time_ns = first_ns;
    for (std::uint32_t i = 0; i < batch.count; ++i) {
      const wire::InertialSample& sample = batch.samples[i];
      time_ns = device.clock.sample_ns(first_ns, std::int64_t{i} * batch.sample_interval_us);
      fusion::InertialMeasurement measurement;
      measurement.specific_force_mps2 = tag.R_sensor_to_body * sample.specific_force_mps2;
      measurement.angular_rate_radps = tag.R_sensor_to_body * sample.angular_rate_radps;
      measurement.has_field = sample.has_field && tag.model.magnetometer;
      if (measurement.has_field) {
        measurement.magnetic_field_ut =
            tag.R_sensor_to_body * (tag.soft_iron * (sample.magnetic_field_ut - tag.hard_iron_ut));
      }
      file(*device.tag, {time_ns, measurement}, device.device_id);
    }
    if (batch.pressure_pa)
      file(*device.tag, {time_ns, fusion::PressureMeasurement{*batch.pressure_pa}}, device.device_id);
  }

  void take(const Device& device, TimeNs time_ns, const wire::Range& range) {
    const Device* subject = range.tag_device_id == device.device_id ? &device : devices_.find(range.tag_device_id);
    if (subject == nullptr || !subject->tag) {
      devices_.note_unknown(range.tag_device_id);
      say("named by a range of device {}; no tag has this device_id", device.device_id);
      return tell(VerdictCode::unknown_device, range.tag_device_id, said());
    }
    const auto& anchors = settings.site.anchors;
    const auto anchor = std::find_if(anchors.begin(), anchors.end(),
                                     [&](const fusion::Anchor& a) { return a.anchor_id == range.anchor_id; });
    TagUnit& unit = tags_[*subject->tag];
    unit.watch.heard_range(arrival_ns_);
    if (anchor == anchors.end()) {
      unit.watch.refused_range();
      say("range to anchor {}: no anchor has this anchor_id", range.anchor_id);
      return tell(VerdictCode::unknown_anchor, device.device_id, said(), subject->tag);
    }
    const auto index = static_cast<std::uint32_t>(anchor - anchors.begin());
    anchors_[index].heard(*subject->tag, arrival_ns_);
    fusion::RangeMeasurement measurement;
    measurement.anchor = index;
    measurement.range_m = (range.range_m - anchor->range_bias_m) / (1.0 + anchor->range_scale);
    // What the radio calls its scatter leaves out what the site adds: the larger figure holds.
    measurement.sigma_m = std::max(anchor->range_sigma_m, range.sigma_m.value_or(0.0));
    if (range.range_m > settings.limits.range_max_m) {
      unit.watch.refused_range();
      say("range {:.1f} m is beyond range_max_m {:g}", range.range_m, settings.limits.range_max_m);
      return tell(VerdictCode::beyond_range_max, device.device_id, said(), subject->tag);
    }
    const TimeNs lag_ns = settings.tags[*subject->tag].range_lag_ns;
    file(*subject->tag, {time_ns - lag_ns, measurement}, device.device_id);
  }

  void take(const Device& device, TimeNs time_ns, const wire::Travel& travel) {
    if (!device.tag) return tell(VerdictCode::unknown_device, device.device_id, "an anchor's device sent travel data");
    tags_[*device.tag].watch.heard_other(arrival_ns_);
    const fusion::TravelMeasurement measurement = {TimeNs{travel.interval_us} * ns_per_us, travel.distance_m,
                                                   travel.turn_rad};
    file(*device.tag, {time_ns, measurement}, device.device_id);
  }

  void file(std::uint32_t tag, const fusion::Measurement& measurement, wire::DeviceId device_id) {
    const VerdictCode code = tags_[tag].track.file(measurement, arrival_ns_, device_id);
    if (code == VerdictCode::used) return;
    if (std::holds_alternative<fusion::RangeMeasurement>(measurement.body)) tags_[tag].watch.refused_range();
    Verdict verdict;
    verdict.arrival_ns = arrival_ns_;
    verdict.time_ns = measurement.time_ns;
    verdict.device_id = device_id;
    verdict.tag = tag;
    verdict.code = code;
    if (code == VerdictCode::too_late) {
      say("measured {:.3f} s before it arrived, delay_max_s is {:g}", seconds(arrival_ns_ - measurement.time_ns),
          seconds(settings.limits.delay_max_ns));
    } else {
      say("measured {:.3f} s after it arrived", seconds(measurement.time_ns - arrival_ns_));
    }
    verdict.text = said();
    sink_.verdict(verdict);
  }

  /// The outcome of one applied measurement.
  void came(std::uint32_t tag, const Entry& entry, const fusion::Outcome& outcome) {
    if (std::holds_alternative<fusion::RangeMeasurement>(entry.body)) {
      const bool usable = outcome.code == fusion::Outcome::Code::used || outcome.code == fusion::Outcome::Code::noted;
      tags_[tag].watch.range_outcome(usable, entry.arrival_ns);
    }
    Verdict verdict;
    verdict.arrival_ns = entry.arrival_ns;
    verdict.time_ns = entry.key.time_ns;
    verdict.device_id = entry.device_id;
    verdict.tag = tag;
    verdict.code = verdict_of(outcome.code);
    verdict.outcome = outcome;
    sink_.verdict(verdict);
  }

  /// Writes a verdict's text into a buffer that is reused.
  template <class... Ts>
  void say(fmt::format_string<Ts...> format, Ts&&... values) {
    text_.clear();
    fmt::format_to(std::back_inserter(text_), format, std::forward<Ts>(values)...);
  }
  [[nodiscard]] std::string_view said() const { return {text_.data(), text_.size()}; }

  void tell(VerdictCode code, wire::DeviceId device_id, std::string_view text, std::optional<std::uint32_t> tag = {}) {
    Verdict verdict;
    verdict.arrival_ns = arrival_ns_;
    verdict.device_id = device_id;
    verdict.tag = tag;
    verdict.code = code;
    verdict.text = text;
    sink_.verdict(verdict);
  }

  void station_record(std::span<const std::byte> bytes) {
    using What = station::v1::StationRecord;
    if (!station_record_.ParseFromArray(bytes.data(), static_cast<int>(bytes.size()))) {
      station_.refused();
      return tell(VerdictCode::malformed, 0, "a station record that cannot be read");
    }
    switch (station_record_.what_case()) {
      case What::kTick:
        return tick();
      case What::kUtcOffset:
        station_.synchronised(station_record_.utc_offset().synchronised());
        return sink_.utc_offset(station_record_.utc_offset().utc_minus_monotonic_ns());
      case What::kCorrection:
        return correct(station_record_.correction());
      case What::kShed:
        return station_.shed(station_record_.shed().records(), now_ns_);
      case What::kCaptureGap:
        return station_.capture_gap(station_record_.capture_gap().records_lost(), now_ns_);
      case What::kLinkState:
        return station_.link(station_record_.link_state().source(), station_record_.link_state().open());
      case What::WHAT_NOT_SET:
        break;
    }
    station_.refused();
    tell(VerdictCode::malformed, 0, "a station record that says nothing this version knows");
  }

  void correct(const station::v1::Correction& word) {
    const auto& tags = settings.tags;
    const auto tag = std::find_if(tags.begin(), tags.end(),
                                  [&](const TagSettings& candidate) { return candidate.model.name == word.tag(); });
    if (tag == tags.end()) return tell(VerdictCode::unknown_device, 0, "a correction for a tag that is not configured");
    if (const Status good = check_correction(word); !good) {
      station_.refused();
      return tell(VerdictCode::implausible, 0, good.error());
    }
    fusion::CorrectionMeasurement measurement;
    if (word.has_east_m() && word.has_north_m()) measurement.position_m = Vector2(word.east_m(), word.north_m());
    if (word.has_up_m()) measurement.up_m = word.up_m();
    if (word.has_position_sigma_m()) measurement.position_sigma_m = word.position_sigma_m();
    if (word.has_heading_deg()) {
      measurement.heading_rad = heading_from_bearing(radians(word.heading_deg()), settings.site.bearing_rad);
    }
    if (word.has_heading_sigma_deg()) measurement.heading_sigma_rad = radians(word.heading_sigma_deg());
    file(static_cast<std::uint32_t>(tag - tags.begin()), {arrival_ns_, measurement}, 0);
  }

  void tick() {
    if (!first_tick_ns_) first_tick_ns_ = now_ns_;
    const bool alive = std::any_of(tags_.begin(), tags_.end(),
                                   [&](const TagUnit& unit) { return unit.watch.hears_inertial(now_ns_); });
    bool all_silent = true;
    bool anchors_changed = false;
    for (AnchorWatch& anchor : anchors_) {
      anchors_changed |= anchor.update(alive, *first_tick_ns_, now_ns_);
      all_silent &= anchor.silent();
    }
    for (std::uint32_t tag = 0; tag < tags_.size(); ++tag) publish(tag, all_silent);
    if (due(anchors_health_ns_, anchors_changed)) {
      for (std::uint32_t i = 0; i < anchors_.size(); ++i) sink_.publish(anchors_[i].report(i, now_ns_));
    }
    if (due(station_health_ns_, station_.update(now_ns_))) {
      StationHealthReport report = station_.report(now_ns_);
      report.unknown_device_packets = devices_.unknown_packets();
      report.unknown_devices = devices_.unknown_devices();
      sink_.publish(report);
      sink_.publish(PulseReport{now_ns_});
    }
  }

  void publish(std::uint32_t tag, bool anchors_silent) {
    TagUnit& unit = tags_[tag];
    unit.track.advance();
    const std::optional<fusion::Estimate> estimate = unit.track.estimate();
    Device* device = devices_.find(settings.tags[tag].device_id);
    const DeviceFigures figures = device->figures(now_ns_, settings.limits.rate_window_ns);
    const bool restarted = unit.track.restarts() != unit.restarts_told;
    unit.restarts_told = unit.track.restarts();
    const bool changed =
        unit.watch.update(estimate.value_or(fusion::Estimate{}), figures, anchors_silent, now_ns_) || restarted;
    const Standing standing = unit.watch.standing();
    if (standing != Standing::silent && estimate && (changed || estimate->time_ns > unit.published_ns)) {
      unit.published_ns = estimate->time_ns;
      TrackReport report;
      report.tag = tag;
      report.standing = standing;
      report.estimate = *estimate;
      report.radius_95_m = unit.watch.radius_95_m();
      sink_.publish(report);
    }
    if (due(unit.health_ns, changed)) {
      sink_.publish(unit.watch.report(tag, figures, unit.track.restarts(), now_ns_));
    }
  }

  /// Whether Health is to be published: on a change, and regularly.
  [[nodiscard]] bool due(TimeNs& last_ns, bool changed) const {
    // Half a tick of grace keeps a period that is a whole number of ticks at that number.
    const bool regular = last_ns == std::numeric_limits<TimeNs>::min() ||
                         now_ns_ - last_ns + settings.limits.tick_ns / 2 >= settings.limits.health_period_ns;
    if (!changed && !regular) return false;
    last_ns = now_ns_;
    return true;
  }

  ReportSink& sink_;
  wire::Decoder decoder_;
  std::vector<wire::Deframer> deframers_;
  DeviceBook devices_;
  StationWatch station_;
  std::deque<TagUnit> tags_;  ///< a deque, since units do not move
  std::deque<AnchorWatch> anchors_;
  station::v1::StationRecord station_record_;  ///< reused
  fmt::memory_buffer text_;                    ///< of the verdict being told
  TimeNs now_ns_ = std::numeric_limits<TimeNs>::min();
  TimeNs arrival_ns_ = 0;
  std::optional<TimeNs> first_tick_ns_;
  TimeNs anchors_health_ns_ = std::numeric_limits<TimeNs>::min();
  TimeNs station_health_ns_ = std::numeric_limits<TimeNs>::min();
};

Engine::Engine(Settings settings, ReportSink& sink, const EstimatorFactory& factory)
    : state_(std::make_unique<State>(std::move(settings), sink, factory)) {}
Engine::~Engine() = default;

void Engine::accept(const RawRecord& record) { state_->accept(record); }
const Settings& Engine::settings() const { return state_->settings; }
void Engine::save(Saver& saver) { state_->save(saver); }
Status Engine::load(std::span<const std::byte> bytes) { return state_->load(bytes); }

}  // namespace kedge::pipeline
