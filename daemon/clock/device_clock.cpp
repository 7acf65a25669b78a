#include "clock/device_clock.h"

#include <algorithm>
#include <cmath>

namespace kedge::clock {
namespace {

constexpr std::int64_t turn_us = std::int64_t{1} << 32;
constexpr double turn_ns = static_cast<double>(turn_us) * 1e3;

/// No line is extrapolated that far (115 days); bounds all arithmetic on stamps from outside.
constexpr std::int64_t diff_us_max = 10'000'000'000'000;
constexpr double excess_ns_max = 1e16;

/// A packet that comes earlier than the line by more than this shows a jump, not a quick path.
constexpr double early_ns_max = 100e6;
/// Later than the line by more than this is worth a suspicion; queues reach it.
constexpr double late_ns_normal = 200e6;
/// The line is trusted less the longer the silence.
constexpr double silence_slope = 300e-6;
/// A fall-back that a queue could explain too: this many packets over this time, all equally late.
constexpr std::uint32_t suspicion_packets = 8;
constexpr TimeNs suspicion_ns = ns_per_s;
constexpr TimeNs suspicion_spread_ns = 100 * ns_per_ms;

/// How fast the answers follow the line where nothing forces them: 0.5 ms per second.
constexpr double fade = 500e-6;
constexpr double correction_ns_settled = 5e6;
constexpr std::size_t seconds_settled = 5;

/// Jumps beyond are restarts; so is one back to the first seconds of a counter.
constexpr std::uint64_t step_us_max = 60'000'000;
constexpr std::uint64_t fresh_counter_us = 10'000'000;

ClockEvent jump_event(std::uint64_t before_us, std::uint64_t after_us) {
  const bool back = after_us < before_us;
  const std::uint64_t jump_us = back ? before_us - after_us : after_us - before_us;
  return jump_us > step_us_max || (back && after_us < fresh_counter_us) ? ClockEvent::restarted : ClockEvent::stepped;
}

}  // namespace

void DeviceClock::begin(std::uint64_t sent_us, TimeNs arrival_ns) {
  started_ = true;
  origin_ns_ = last_arrival_ns_ = arrival_ns;
  last_raw_us_ = sent_us;
  last_us_ = newest_us_ = 0;
  correction_ns_ = 0.0;
  suspicion_ = {};
  envelope_.restart();
  envelope_.add(0, 0);
}

DeviceClock::Fit DeviceClock::fit(std::uint64_t sent_us, TimeNs arrival_ns) const {
  Fit result;
  const auto raw_diff_us = static_cast<std::int64_t>(sent_us - last_raw_us_);
  const std::int64_t diff_us = std::clamp(raw_diff_us, -diff_us_max, diff_us_max);
  const auto place = [&] {
    result.device_us = last_us_ + diff_us + result.turns * turn_us;
    result.delay_ns = arrival_ns - origin_ns_ - result.device_us * ns_per_us;
    result.excess_ns = static_cast<double>(result.delay_ns) - envelope_.at(result.device_us);
  };
  place();
  if (!wide_ && diff_us == raw_diff_us) {
    result.turns = std::llround(result.excess_ns / turn_ns);
    place();
  }
  return result;
}

Mapped DeviceClock::map(std::uint64_t device_time_us, std::uint32_t span_us, TimeNs arrival_ns) {
  const std::uint64_t sent_us = device_time_us + span_us;
  wide_ = wide_ || device_time_us >= static_cast<std::uint64_t>(turn_us);
  if (!started_) {
    begin(sent_us, arrival_ns);
    return {mapped_ns(0.0, span_us, arrival_ns), ClockEvent::first};
  }
  const Fit here = fit(sent_us, arrival_ns);
  const double silence_ns = static_cast<double>(arrival_ns - last_arrival_ns_) * silence_slope;
  const bool early = here.excess_ns < -(early_ns_max + silence_ns);
  const bool late = here.excess_ns > late_ns_normal + silence_ns;
  if (early || (late && fell_back(sent_us, arrival_ns, here.excess_ns))) {
    const ClockEvent event = jump_event(last_raw_us_, sent_us);
    begin(sent_us, arrival_ns);
    return {mapped_ns(0.0, span_us, arrival_ns), event};
  }
  if (late) return {mapped_ns(here.excess_ns - correction_ns_, span_us, arrival_ns), ClockEvent::none};
  accept(here, sent_us, arrival_ns);
  const double excess_ns = static_cast<double>(here.delay_ns) - envelope_.at(here.device_us) - correction_ns_;
  return {mapped_ns(excess_ns, span_us, arrival_ns), here.turns > 0 ? ClockEvent::wrapped : ClockEvent::none};
}

void DeviceClock::accept(const Fit& fit, std::uint64_t sent_us, TimeNs arrival_ns) {
  const std::int64_t newest_us = std::max(newest_us_, fit.device_us);
  const double answered_ns = envelope_.at(newest_us) + correction_ns_;
  envelope_.add(fit.device_us, fit.delay_ns);
  correction_ns_ = answered_ns - envelope_.at(newest_us);
  const double faded_ns = fade * 1e3 * static_cast<double>(newest_us - newest_us_);
  correction_ns_ -= std::clamp(correction_ns_, -faded_ns, faded_ns);
  // No answer lies after the arrival; one that would shows that all answers are late, so all follow.
  correction_ns_ = std::min(correction_ns_, static_cast<double>(fit.delay_ns) - envelope_.at(fit.device_us));
  newest_us_ = newest_us;
  last_us_ = fit.device_us;
  last_raw_us_ = sent_us;
  last_arrival_ns_ = arrival_ns;
  suspicion_ = {};
}

bool DeviceClock::fell_back(std::uint64_t sent_us, TimeNs arrival_ns, double excess_ns) {
  const auto device_us = static_cast<std::int64_t>(sent_us - suspicion_.first_raw_us);
  const TimeNs passed_ns = arrival_ns - suspicion_.first_arrival_ns;
  const bool goes_on = suspicion_.packets > 0 && device_us > -diff_us_max && device_us < diff_us_max;
  // A queue that is worked off: the stamps run ahead of the arrivals.
  const TimeNs apart_ns = goes_on ? passed_ns - device_us * ns_per_us : 0;
  const bool follows = goes_on && std::abs(apart_ns) <= suspicion_spread_ns;
  if (!follows) {
    suspicion_ = {1, sent_us, arrival_ns};
    return false;
  }
  ++suspicion_.packets;
  if (excess_ns > static_cast<double>(late_max_ns)) return device_us > 0 && 2 * passed_ns > device_us * ns_per_us;
  return suspicion_.packets >= suspicion_packets && passed_ns >= suspicion_ns;
}

TimeNs DeviceClock::mapped_ns(double excess_ns, std::uint32_t span_us, TimeNs arrival_ns) const {
  const TimeNs sent_ns = arrival_ns - std::llround(std::clamp(excess_ns, 0.0, excess_ns_max));
  return sample_ns(sent_ns, -static_cast<std::int64_t>(span_us));
}

TimeNs DeviceClock::sample_ns(TimeNs stamp_ns, std::int64_t offset_us) const {
  return stamp_ns + std::llround(static_cast<double>(offset_us) * 1e3 * (1.0 + envelope_.slope()));
}

double DeviceClock::skew_ppm() const { return (1.0 / (1.0 + envelope_.slope()) - 1.0) * 1e6; }

double DeviceClock::sigma_s() const { return envelope_.sigma_ns() * 1e-9; }

bool DeviceClock::steady() const {
  return envelope_.seconds() >= seconds_settled && sigma_s() <= unsteady_sigma_s &&
         std::abs(correction_ns_) <= correction_ns_settled;
}

}  // namespace kedge::clock
