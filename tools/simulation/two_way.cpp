#include "simulation/two_way.h"

#include <cmath>

#include "core/assert.h"
#include "core/physics.h"

namespace kedge::simulation {

namespace {

// Answer times of a common radio at 6.8 Mbit/s with a microcontroller behind it; the open recordings
// have 301 to 389 us and, for the second reply, 1539 us later.
constexpr double reply_s = 330e-6;
constexpr double second_reply_s = 1539e-6;
constexpr double final_s = 610e-6;

}  // namespace

RadioCounter::RadioCounter(Random& random, double skew_max_ppm)
    : origin_(random.bits()), skew_ppm_(random.uniform(-skew_max_ppm, skew_max_ppm)) {}

std::uint64_t RadioCounter::stamp(TimeNs t_ns, double after_s, std::uint32_t bits) const {
  KEDGE_ASSERT(bits >= 16 && bits <= 64);
  const double rate_per_s = (1.0 + 1e-6 * skew_ppm_) / ranging_tick_s;
  // The small part apart from the large one: together they would exhaust a double.
  const double base = std::floor(seconds(t_ns) * rate_per_s);
  const double ticks = std::floor(after_s * rate_per_s);
  const std::uint64_t count = origin_ + static_cast<std::uint64_t>(base) + static_cast<std::uint64_t>(ticks);
  return bits == 64 ? count : count & ((std::uint64_t{1} << bits) - 1U);
}

void fill_two_way(RangeForm form, TimeNs t_ns, double distance_m, double propagation_speed_mps, const RadioCounter& tag,
                  const RadioCounter& anchor, std::uint32_t bits, packets::v1::Range& range) {
  const double flight_s = distance_m / propagation_speed_mps;
  const auto at_tag = [&](double after_s) { return tag.stamp(t_ns, after_s, bits); };
  const auto at_anchor = [&](double after_s) { return anchor.stamp(t_ns, after_s, bits); };
  const double replied_s = flight_s + reply_s;

  packets::v1::TwoWay& two_way = *range.mutable_two_way();
  two_way.set_counter_bits(bits);
  const auto fill_first = [&](auto& exchange) {
    exchange.set_poll_tx(at_tag(0.0));
    exchange.set_poll_rx(at_anchor(flight_s));
    exchange.set_reply_tx(at_anchor(replied_s));
    exchange.set_reply_rx(at_tag(replied_s + flight_s));
  };
  switch (form) {
    case RangeForm::distance:
      KEDGE_ASSERT(false && "a distance has no stamps");
      break;
    case RangeForm::single_sided: {
      auto& exchange = *two_way.mutable_single_sided();
      fill_first(exchange);
      const double offset_ppm = anchor.skew_ppm() - tag.skew_ppm();
      exchange.set_clock_offset_ppm(static_cast<float>(std::round(10.0 * offset_ppm) / 10.0));
      break;
    }
    case RangeForm::double_sided: {
      auto& exchange = *two_way.mutable_double_sided();
      fill_first(exchange);
      const double final_tx_s = replied_s + flight_s + final_s;
      exchange.set_final_tx(at_tag(final_tx_s));
      exchange.set_final_rx(at_anchor(final_tx_s + flight_s));
      break;
    }
    case RangeForm::second_reply: {
      auto& exchange = *two_way.mutable_second_reply();
      fill_first(exchange);
      exchange.set_second_reply_tx(at_anchor(replied_s + second_reply_s));
      exchange.set_second_reply_rx(at_tag(replied_s + second_reply_s + flight_s));
      break;
    }
  }
}

}  // namespace kedge::simulation
