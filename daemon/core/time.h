// Time in one representation everywhere: signed nanoseconds.
//
// A name ending in `_ns` without further word is station monotonic time, the clock that orders
// everything. UTC appears only as `utc_ns`, made from it by an offset that is itself a record.
#pragma once

#include <cstdint>
#include <limits>

namespace kedge {

using TimeNs = std::int64_t;

inline constexpr TimeNs ns_per_us = 1'000;
inline constexpr TimeNs ns_per_ms = 1'000'000;
inline constexpr TimeNs ns_per_s = 1'000'000'000;

/// Nanoseconds to seconds. Meant for differences: a double holds 104 days to the nanosecond.
constexpr double seconds(TimeNs duration_ns) { return static_cast<double>(duration_ns) * 1e-9; }

/// Seconds to the nearest nanosecond; the caller keeps |duration_s| below 9e9.
constexpr TimeNs from_seconds(double duration_s) {
  return static_cast<TimeNs>(duration_s * 1e9 + (duration_s < 0 ? -0.5 : 0.5));
}

/// a + b, held at the ends of the type: the times and offsets in a capture may be anything.
constexpr TimeNs add_saturating(TimeNs a, TimeNs b) {
  TimeNs sum = 0;
  if (!__builtin_add_overflow(a, b, &sum)) return sum;
  return b < 0 ? std::numeric_limits<TimeNs>::min() : std::numeric_limits<TimeNs>::max();
}

}  // namespace kedge
