// The counter stamps that a two-way ranging over a given distance leaves at tag and anchor.
//
// Both radios count ticks of their own crystals, from unrelated origins; stamps are whole ticks.
// Source of the exchanges: Neirynck, Luk, McLaughlin, An alternative double-sided two-way ranging
// method, WPNC 2016.
#pragma once

#include <cstdint>

#include "core/time.h"
#include "proto/packets.pb.h"
#include "simulation/random.h"
#include "simulation/scenario.h"

namespace kedge::simulation {

/// A radio's counter: ticks from a random origin, running fast by skew_ppm.
class RadioCounter {
 public:
  RadioCounter(Random& random, double skew_max_ppm);

  /// The stamp `after_s` past the instant t_ns, modulo 2^bits. after_s stays well below a second.
  [[nodiscard]] std::uint64_t stamp(TimeNs t_ns, double after_s, std::uint32_t bits) const;
  [[nodiscard]] double skew_ppm() const { return skew_ppm_; }

 private:
  std::uint64_t origin_;
  double skew_ppm_;
};

/// Fills `range` with the exchange that `form` names (not `distance`), begun at t_ns. A single-sided
/// exchange reports the clock offset as a receiver estimates it, to 0.1 ppm.
void fill_two_way(RangeForm form, TimeNs t_ns, double distance_m, double propagation_speed_mps, const RadioCounter& tag,
                  const RadioCounter& anchor, std::uint32_t bits, packets::v1::Range& range);

}  // namespace kedge::simulation
