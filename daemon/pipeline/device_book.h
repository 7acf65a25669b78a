// The devices the station knows, and a bounded memory of those it does not.
#pragma once

#include <algorithm>
#include <cstdint>
#include <optional>
#include <utility>
#include <vector>

#include "clock/device_clock.h"
#include "pipeline/sequence.h"
#include "pipeline/settings.h"
#include "pipeline/tag_watch.h"
#include "wire/packet.h"

namespace kedge::pipeline {

/// One device that sends packets: a tag's, or an anchor's that reports for its tags.
struct Device {
  wire::DeviceId device_id = 0;
  std::optional<std::uint32_t> tag;
  clock::DeviceClock clock;
  SequenceTracker sequence;

  [[nodiscard]] DeviceFigures figures(TimeNs now_ns, TimeNs window_ns) {
    return {sequence.missing_share(now_ns, window_ns), clock.steady(), clock.sigma_s(), clock.skew_ppm()};
  }

  /// What changes while it runs.
  template <class Archive>
  void fields(Archive& archive) {
    archive(clock, sequence);
  }
};

class DeviceBook {
 public:
  explicit DeviceBook(const Settings& settings) : unknown_max_(settings.limits.unknown_devices_max) {
    for (std::uint32_t tag = 0; tag < settings.tags.size(); ++tag) add(settings.tags[tag].device_id, tag);
    for (const wire::DeviceId device_id : settings.anchor_devices) add(device_id, std::nullopt);
    std::sort(devices_.begin(), devices_.end(),
              [](const Device& a, const Device& b) { return a.device_id < b.device_id; });
    unknown_.reserve(unknown_max_);
  }

  [[nodiscard]] Device* find(wire::DeviceId device_id) {
    const auto at = std::lower_bound(devices_.begin(), devices_.end(), device_id,
                                     [](const Device& device, wire::DeviceId id) { return device.device_id < id; });
    return at != devices_.end() && at->device_id == device_id ? &*at : nullptr;
  }

  /// Counts a packet of a device that is not configured; only the first few numbers are remembered.
  void note_unknown(wire::DeviceId device_id) {
    ++unknown_packets_;
    if (unknown_.size() < unknown_max_ && std::find(unknown_.begin(), unknown_.end(), device_id) == unknown_.end()) {
      unknown_.push_back(device_id);
    }
  }
  [[nodiscard]] std::uint64_t unknown_packets() const { return unknown_packets_; }
  [[nodiscard]] std::uint32_t unknown_devices() const { return static_cast<std::uint32_t>(unknown_.size()); }

  template <class Archive>
  void fields(Archive& archive) {
    for (Device& device : devices_) archive(device);
    archive(unknown_, unknown_packets_);
  }

 private:
  void add(wire::DeviceId device_id, std::optional<std::uint32_t> tag) {
    Device& device = devices_.emplace_back();
    device.device_id = device_id;
    device.tag = tag;
  }

  std::vector<Device> devices_;
  std::vector<wire::DeviceId> unknown_;
  std::uint64_t unknown_packets_ = 0;
  std::size_t unknown_max_;
};

}  // namespace kedge::pipeline
