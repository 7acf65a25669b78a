// Logs as a capture, as if a station had recorded them.
#pragma once

#include <cstdint>
#include <string>

#include "convert/log_folder.h"
#include "core/result.h"
#include "proto/config.pb.h"

namespace kedge::convert {

struct ToCapture {
  std::uint64_t packets = 0;
  /// Packets that a station refuses at the door: they are in the capture all the same.
  std::uint64_t refused = 0;
  std::string first_refusal;  ///< "FILE:LINE: why"
};

/// Writes a new file. A packet arrives at the time of its event, so that message times compare with the
/// logs' own (but for LogFolder::shift_s); device time is 1000 s more, in microseconds.
/// Times from 10^9 s on are taken as UTC, others begin on 2026-01-01.
[[nodiscard]] Result<ToCapture> write_capture(const LogFolder& folder, const config::v1::Configuration& configuration,
                                              const std::string& path);

}  // namespace kedge::convert
