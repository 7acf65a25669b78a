// Writes a capture of what never came over a link, as if a station had recorded it.
#pragma once

#include <filesystem>
#include <memory>
#include <span>
#include <string>
#include <vector>

#include "capture/capture_writer.h"
#include "capture/file_sink.h"
#include "core/record.h"
#include "core/result.h"
#include "proto/config.pb.h"
#include "proto/station.pb.h"

namespace kedge::recording {

/// 2026-01-01 00:00:00 UTC: where times that are no dates begin. Invented, and the same every time.
inline constexpr TimeNs utc_begin_ns = 1'767'225'600 * ns_per_s;

/// How the recording begins: the clock, and the links that open.
struct Opening {
  std::string program;
  TimeNs time_ns = 0;
  TimeNs utc_minus_monotonic_ns = 0;
  bool synchronised = false;
  std::vector<SourceId> links;
};

/// Numbers the records of each source. Give them in order of time.
class Recorder {
 public:
  /// Makes the file, which must not exist yet, and writes its head and opening. The configuration must be
  /// one that was checked.
  [[nodiscard]] static Result<Recorder> create(const std::filesystem::path& path,
                                               const config::v1::Configuration& configuration, const Opening& opening);

  [[nodiscard]] Status station(TimeNs time_ns, const station::v1::StationRecord& record);
  [[nodiscard]] Status tick(TimeNs time_ns);
  /// Path: of a datagram; a serial line has none.
  [[nodiscard]] Status input(TimeNs time_ns, SourceId source, std::span<const std::byte> bytes,
                             const capture::UdpPath& path);
  [[nodiscard]] Status close() { return file_->close(); }

 private:
  Recorder(std::unique_ptr<capture::FileSink> file, capture::CaptureWriter writer, std::size_t sources)
      : file_(std::move(file)), writer_(std::move(writer)), sequences_(sources) {}
  [[nodiscard]] Status open(const Opening& opening);

  std::unique_ptr<capture::FileSink> file_;  // the writer points to it
  capture::CaptureWriter writer_;
  std::vector<std::uint64_t> sequences_;  // of the next record, by source
};

}  // namespace kedge::recording
