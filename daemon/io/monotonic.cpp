#include "io/monotonic.h"

#include <sys/timex.h>

#include <cstdlib>
#include <ctime>

namespace kedge::io {

namespace {

TimeNs read_clock(clockid_t clock) {
  timespec t{};
  ::clock_gettime(clock, &t);
  return TimeNs{t.tv_sec} * ns_per_s + t.tv_nsec;
}

}  // namespace

TimeNs now_monotonic() { return read_clock(CLOCK_MONOTONIC); }
TimeNs now_utc() { return read_clock(CLOCK_REALTIME); }

ClockReading read_clocks() {
  ClockReading best;
  TimeNs narrowest_ns = 0;
  for (int i = 0; i < 3; ++i) {
    const TimeNs before_ns = now_monotonic();
    const TimeNs utc_ns = now_utc();
    const TimeNs width_ns = now_monotonic() - before_ns;
    if (i == 0 || width_ns < narrowest_ns) {
      narrowest_ns = width_ns;
      best = {before_ns + width_ns / 2, utc_ns};
    }
  }
  return best;
}

void ReceiveStamps::read(const ClockReading& now) {
  if (std::abs(now.utc_minus_monotonic_ns() - now_.utc_minus_monotonic_ns()) > step_min_ns) stepped_ = true;
  now_ = now;
}

bool utc_synchronised() {
  timex query{};
  const int state = ::adjtimex(&query);
  return state >= 0 && state != TIME_ERROR && (query.status & STA_UNSYNC) == 0;
}

std::optional<UtcOffset> UtcWatch::check(UtcOffset now) {
  if (last_ && last_->synchronised == now.synchronised &&
      std::abs(now.utc_minus_monotonic_ns - last_->utc_minus_monotonic_ns) <= change_min_ns) {
    return std::nullopt;
  }
  last_ = now;
  return last_;
}

}  // namespace kedge::io
