// A capture through the same path as the day it was taken.
#pragma once

#include <cstdint>
#include <functional>
#include <optional>
#include <string>

#include "app/conduit.h"
#include "capture/capture_reader.h"
#include "core/result.h"
#include "proto/config.pb.h"

namespace kedge::app {

struct ReplaySummary {
  std::uint64_t records = 0;
  std::uint64_t messages = 0;
  std::uint64_t damaged_places = 0;
  std::uint64_t bytes_lost = 0;
  std::uint64_t records_missing = 0;  ///< by their numbers
  TimeNs first_ns = 0;                ///< of the first and last record, station time
  TimeNs last_ns = 0;
};

/// The configuration to replay with: the one in the capture, or `other` in its place. The capture's own
/// links always hold, since they say what its bytes are.
[[nodiscard]] Result<pipeline::Settings> replay_settings(const capture::CaptureHead& head,
                                                         const std::optional<config::v1::Configuration>& other);

/// Called before each record with its station time, to pace a replay.
using Pace = std::function<void(TimeNs)>;
/// Called for each damaged stretch.
using DamageLog = std::function<void(const capture::Damage&)>;

/// Passes every record to the conduit, in the capture's order. Records whose numbers show that others are
/// missing before them are preceded by a CaptureGap record, so that the station's health says so.
ReplaySummary replay(capture::CaptureReader& reader, Conduit& conduit, const Pace& pace, const DamageLog& damage_log);

}  // namespace kedge::app
