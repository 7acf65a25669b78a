// A device stamps its packets with a counter of its own; the filters need station time.
//
// A packet arrives later than it was made, by a delay that is never negative and sometimes small. In
// the plane of arrival over device time the quick packets form the lower edge of the cloud, and the
// line along that edge (clock/envelope.h) is the device's clock: its slope gives the skew, its height
// the offset plus the least delay of the link. That least delay cannot be seen from one direction:
// mapped times lie late by it.
//
// The counter's width is not configured: a 32-bit counter that turned over is the one whose packet fits
// the line again after adding 2^32. A counter that jumped ahead shows at once, for no packet comes
// before it was sent. One that fell back looks like a late packet first: the next packet confirms it if
// no queue holds packets that long (late_max_ns), a second of equally late ones otherwise.
#pragma once

#include <cstdint>

#include "clock/envelope.h"
#include "core/time.h"

namespace kedge::clock {

/// What a packet showed about its device's counter.
enum class ClockEvent : std::uint8_t {
  none,
  first,      ///< the first packet ever
  wrapped,    ///< a 32-bit counter turned over; the mapping goes on
  restarted,  ///< the counter began anew; so did the mapping
  stepped,    ///< the counter jumped by up to a minute; the mapping began anew
};

struct Mapped {
  TimeNs time_ns = 0;  ///< station time of the packet's stamp, never after its arrival
  ClockEvent event = ClockEvent::none;
};

class DeviceClock {
 public:
  /// One packet, in order of arrival (arrival_ns within 0 to 2^62). `device_time_us` is its stamp, `span_us` how far
  /// its newest sample lies behind the stamp (0 for a range): it cannot have been sent before that.
  /// Packets up to late_max_ns behind the others never restart the mapping by themselves.
  Mapped map(std::uint64_t device_time_us, std::uint32_t span_us, TimeNs arrival_ns);

  /// The sample `offset_us` of device time after the stamp that map() just answered with `stamp_ns`.
  [[nodiscard]] TimeNs sample_ns(TimeNs stamp_ns, std::int64_t offset_us) const;

  /// Positive: the device runs fast. 0 until there is enough to tell.
  [[nodiscard]] double skew_ppm() const;

  /// How well the mapping is known apart from the least delay, seconds, one sigma.
  [[nodiscard]] double sigma_s() const;

  /// False from a start, restart or step until the mapping has settled again, and while sigma_s() is
  /// above unsteady_sigma_s: the concern `clock_unsteady`, whose figure is sigma_s().
  [[nodiscard]] bool steady() const;

  static constexpr double unsteady_sigma_s = 0.01;
  static constexpr TimeNs late_max_ns = 2500 * ns_per_ms;

  /// State visitor, see core/archive.h.
  template <class Archive>
  void fields(Archive& archive) {
    archive(started_, wide_, origin_ns_, last_raw_us_, last_us_, newest_us_, last_arrival_ns_, correction_ns_,
            envelope_, suspicion_);
  }

 private:
  /// Packets in a row that do not fit because they come late: a counter that fell back, or a queue.
  struct Suspicion {
    std::uint32_t packets = 0;
    std::uint64_t first_raw_us = 0;
    TimeNs first_arrival_ns = 0;

    template <class Archive>
    void fields(Archive& archive) {
      archive(packets, first_raw_us, first_arrival_ns);
    }
  };
  /// Where a packet stands against the mapping.
  struct Fit {
    std::int64_t device_us = 0;  ///< of its newest sample, unwrapped, from the mapping's origin
    std::int64_t turns = 0;      ///< of a 32-bit counter, forward positive
    std::int64_t delay_ns = 0;   ///< arrival minus device time, from the mapping's origin
    double excess_ns = 0.0;      ///< delay above the line
  };

  [[nodiscard]] Fit fit(std::uint64_t sent_us, TimeNs arrival_ns) const;
  void begin(std::uint64_t sent_us, TimeNs arrival_ns);
  void accept(const Fit& fit, std::uint64_t sent_us, TimeNs arrival_ns);
  /// Whether this late packet and those before it show that the counter fell back.
  bool fell_back(std::uint64_t sent_us, TimeNs arrival_ns, double excess_ns);
  [[nodiscard]] TimeNs mapped_ns(double excess_ns, std::uint32_t span_us, TimeNs arrival_ns) const;

  bool started_ = false;
  bool wide_ = false;              ///< a stamp of more than 32 bits was seen
  TimeNs origin_ns_ = 0;           ///< arrival of the packet that began the mapping; device time 0 there
  std::uint64_t last_raw_us_ = 0;  ///< the last packet that fitted, as it was stamped
  std::int64_t last_us_ = 0;       ///< and unwrapped
  std::int64_t newest_us_ = 0;     ///< greatest of those
  TimeNs last_arrival_ns_ = 0;
  double correction_ns_ = 0.0;  ///< answered mapping minus line; fades, so that the answers are smooth
  Envelope envelope_;
  Suspicion suspicion_;
};

}  // namespace kedge::clock
