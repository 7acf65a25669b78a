// Writes records down before they are used: pcapng, as FORMAT.md lays it out, so that general network
// tools can open a capture.
#pragma once

#include <cstddef>
#include <vector>

#include "capture/arrival.h"
#include "capture/byte_stream.h"
#include "core/result.h"

namespace kedge::capture {

/// Not thread-safe. Writing allocates nothing once the buffer has grown to the largest record.
class CaptureWriter {
 public:
  /// Begins a capture: writes the head. `sink` must outlive the writer. Fails when a text is too long
  /// for the format or the sink refuses.
  static Result<CaptureWriter> begin(ByteSink& sink, const CaptureHead& head);

  /// Appends one record. After a failure nothing of it is in the capture, and the next may be tried;
  /// tell the gap by a CaptureGap record. Refused: a source that the head does not name, a datagram
  /// without addresses (or too long for its family), more than record_bytes_max bytes.
  Status write(const Arrival& arrival);

  /// Hands everything to the operating system.
  Status flush();

 private:
  explicit CaptureWriter(ByteSink& sink) : sink_(&sink) {}

  ByteSink* sink_;
  std::vector<std::byte> block_;
  std::vector<Link> links_;
  TimeNs utc_minus_monotonic_ns_ = 0;
};

}  // namespace kedge::capture
