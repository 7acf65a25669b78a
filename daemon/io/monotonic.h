// The station's clocks, read in one place.
//
// Records are ordered by CLOCK_MONOTONIC; UTC is shown by an offset from it, and a change of that
// offset is a record. Kernel receive stamps are UTC and are turned to monotonic time at the moment
// of reading.
#pragma once

#include <algorithm>
#include <optional>

#include "core/time.h"

namespace kedge::io {

[[nodiscard]] TimeNs now_monotonic();
[[nodiscard]] TimeNs now_utc();

/// Both clocks at one instant.
struct ClockReading {
  TimeNs monotonic_ns = 0;
  TimeNs utc_ns = 0;

  [[nodiscard]] TimeNs utc_minus_monotonic_ns() const { return utc_ns - monotonic_ns; }
};

/// Reads UTC between two monotonic readings and keeps the narrowest of three pairs, so that being
/// scheduled away between them does not look like a step.
[[nodiscard]] ClockReading read_clocks();

/// A datagram is believed to have waited in the kernel at most this long.
inline constexpr TimeNs kernel_wait_max_ns = ns_per_s;

/// Monotonic arrival of what the kernel stamped with UTC: now - clamp(age, 0, kernel_wait_max_ns).
[[nodiscard]] constexpr TimeNs arrival_ns(const ClockReading& now, TimeNs stamp_utc_ns) {
  return now.monotonic_ns - std::clamp<TimeNs>(now.utc_ns - stamp_utc_ns, 0, kernel_wait_max_ns);
}

/// Turns the receive stamps of one socket into monotonic arrivals. A step of the UTC clock while datagrams
/// wait in the kernel would make them look older than they are: from such a step on, until the socket is
/// empty, they arrive when they are read.
class ReceiveStamps {
 public:
  /// The clocks drift apart by less between two reads of a busy socket, and on a quiet one nothing waits.
  static constexpr TimeNs step_min_ns = 5 * ns_per_ms;

  /// `opened`: when the socket was.
  explicit ReceiveStamps(const ClockReading& opened) : now_(opened) {}

  /// The clocks right after a read.
  void read(const ClockReading& now);
  /// The socket held no more than was read.
  void emptied() { stepped_ = false; }
  /// Arrival of a datagram of the last read; without a stamp, that read.
  [[nodiscard]] TimeNs arrival_ns(std::optional<TimeNs> stamp_utc_ns) const {
    return stepped_ || !stamp_utc_ns ? now_.monotonic_ns : io::arrival_ns(now_, *stamp_utc_ns);
  }

 private:
  ClockReading now_;
  bool stepped_ = false;
};

/// Whether the operating system calls its clock synchronised (adjtimex; reads only).
[[nodiscard]] bool utc_synchronised();

struct UtcOffset {
  TimeNs utc_minus_monotonic_ns = 0;
  bool synchronised = false;

  bool operator==(const UtcOffset&) const = default;
};

/// Says when the offset has to be recorded anew.
class UtcWatch {
 public:
  static constexpr TimeNs change_min_ns = 10 * ns_per_ms;

  /// The offset if it is the first, differs by more than change_min_ns from the last one returned, or
  /// the synchronised flag changed; otherwise nothing. Call it about once a second.
  [[nodiscard]] std::optional<UtcOffset> check() {
    return check({read_clocks().utc_minus_monotonic_ns(), utc_synchronised()});
  }
  [[nodiscard]] std::optional<UtcOffset> check(UtcOffset now);

 private:
  std::optional<UtcOffset> last_;
};

}  // namespace kedge::io
