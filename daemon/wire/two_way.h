// Two-way ranging: counter stamps of tag and anchor to a distance.
//
// Stamps are ticks of 1/(128 x 499.2 MHz) (core/physics.h), read from counters of `counter_bits` bits;
// intervals are taken modulo 2^counter_bits, so each must be shorter than one turn of the counter.
// Intervals: poll to reply as the tag sees it (round) and as the anchor sees it (answer).
// Sources: Neirynck, Luk, McLaughlin, An alternative double-sided two-way ranging method, WPNC 2016;
// IEEE 802.15.4z. All formulas are arranged as small differences of intervals, which are exact in
// integers, times ratios: 64-bit floating point then resolves far below one tick.
#pragma once

#include <cstdint>
#include <optional>
#include <variant>

#include "core/result.h"

namespace kedge::wire {

struct SingleSided {
  std::uint64_t poll_tx = 0;   ///< tag
  std::uint64_t poll_rx = 0;   ///< anchor
  std::uint64_t reply_tx = 0;  ///< anchor
  std::uint64_t reply_rx = 0;  ///< tag
  /// Positive: the anchor's clock runs fast against the tag's. Absent: taken as 0, which errs by half
  /// of speed x offset x answer time.
  std::optional<double> clock_offset_ppm;
};

struct DoubleSided {
  std::uint64_t poll_tx = 0;   ///< tag
  std::uint64_t poll_rx = 0;   ///< anchor
  std::uint64_t reply_tx = 0;  ///< anchor
  std::uint64_t reply_rx = 0;  ///< tag
  std::uint64_t final_tx = 0;  ///< tag
  std::uint64_t final_rx = 0;  ///< anchor
  /// Both answer times are equal by design: the plain mean, instead of the asymmetric formula.
  bool symmetric = false;
};

/// The anchor answers twice; the ratio of the two spacings is the ratio of the clocks.
struct SecondReply {
  std::uint64_t poll_tx = 0;          ///< tag
  std::uint64_t poll_rx = 0;          ///< anchor
  std::uint64_t reply_tx = 0;         ///< anchor
  std::uint64_t reply_rx = 0;         ///< tag
  std::uint64_t second_reply_tx = 0;  ///< anchor
  std::uint64_t second_reply_rx = 0;  ///< tag
};

struct TwoWay {
  unsigned counter_bits = 0;  ///< 16 to 64
  std::variant<SingleSided, DoubleSided, SecondReply> exchange;
};

/// Clocks further apart than this are no clocks: stamps were mixed up or a counter turned over.
inline constexpr double clock_offset_ppm_max = 200.0;

/// One-way time of flight in ticks, possibly a little negative; or why these stamps cannot be right.
[[nodiscard]] Result<double> time_of_flight_ticks(const TwoWay& stamps);

/// Distance in metres, at least range_m_min and at most range_m_max; or why not.
[[nodiscard]] Result<double> two_way_range_m(const TwoWay& stamps, double propagation_speed_mps);

/// What a range can be at all. Noise and antenna delays make short ones a little negative.
inline constexpr double range_m_min = -5.0;
inline constexpr double range_m_max = 10'000.0;

}  // namespace kedge::wire
