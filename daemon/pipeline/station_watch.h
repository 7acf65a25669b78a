// Watches over the station itself: its links, what it had to drop, and its capture.
#pragma once

#include <algorithm>
#include <cstdint>
#include <vector>

#include "pipeline/concerns.h"
#include "pipeline/rate_window.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"

namespace kedge::pipeline {

class StationWatch {
 public:
  explicit StationWatch(const Settings& settings) : limits_(settings.limits), open_(settings.links.size()) {}

  void record() { ++records_; }
  void packet() { ++packets_; }
  void refused() { ++refused_; }
  void link(SourceId source, bool open) {
    if (source >= 1 && source <= open_.size()) open_[source - 1] = open;
  }
  void shed(std::uint64_t records, TimeNs now_ns) {
    shed_.add(now_ns, limits_.rate_window_ns, static_cast<double>(records));
  }
  /// `records` may be 0: the disk refuses, nothing is lost yet.
  void capture_gap(std::uint64_t records, TimeNs now_ns) {
    capture_gaps_.add(now_ns, limits_.rate_window_ns);
    capture_lost_ = static_cast<double>(records);
  }
  void synchronised(bool synchronised) { synchronised_ = synchronised; }

  bool update(TimeNs now_ns) {
    const double shed = shed_.total(now_ns, limits_.rate_window_ns);
    concerns_.note(Concern::overload, shed > 0.0, shed, now_ns);
    const bool failing = capture_gaps_.total(now_ns, limits_.rate_window_ns) > 0.0;
    concerns_.note(Concern::capture_failing, failing, capture_lost_, now_ns);
    const auto closed = std::find(open_.begin(), open_.end(), false);
    concerns_.note(Concern::link_down, closed != open_.end(), static_cast<double>(closed - open_.begin() + 1), now_ns,
                   {0, 0});
    return concerns_.take_changed();
  }

  [[nodiscard]] StationHealthReport report(TimeNs now_ns) const {
    StationHealthReport report;
    report.time_ns = now_ns;
    report.concerns = concerns_.list();
    report.records = records_;
    report.packets = packets_;
    report.packets_refused = refused_;
    report.links_open = static_cast<std::uint32_t>(std::count(open_.begin(), open_.end(), true));
    report.links = static_cast<std::uint32_t>(open_.size());
    report.utc_synchronised = synchronised_;
    return report;
  }

  template <class Archive>
  void fields(Archive& archive) {
    for (auto&& link_open : open_) {
      bool open = link_open;
      archive(open);
      link_open = open;
    }
    archive(concerns_, shed_, capture_gaps_, capture_lost_, records_, packets_, refused_, synchronised_);
  }

 private:
  const Limits& limits_;
  ConcernBook concerns_;
  std::vector<bool> open_;
  RateWindow shed_;
  RateWindow capture_gaps_;
  double capture_lost_ = 0.0;  ///< records, as told last
  std::uint64_t records_ = 0;
  std::uint64_t packets_ = 0;
  std::uint64_t refused_ = 0;
  bool synchronised_ = false;
};

}  // namespace kedge::pipeline
