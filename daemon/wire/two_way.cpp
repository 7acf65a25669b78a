#include "wire/two_way.h"

#include <fmt/core.h>

#include <cmath>

#include "core/physics.h"

namespace kedge::wire {
namespace {

/// Ticks from one reading of a counter to a later one of the same counter.
class Counter {
 public:
  explicit Counter(unsigned bits) : mask_(~std::uint64_t{0} >> (64 - bits)) {}
  [[nodiscard]] std::uint64_t between(std::uint64_t earlier, std::uint64_t later) const {
    return (later - earlier) & mask_;
  }

 private:
  std::uint64_t mask_;
};

/// a - b of two intervals; exact, as both are far below 2^63 where the result means anything.
double difference(std::uint64_t a, std::uint64_t b) { return static_cast<double>(static_cast<std::int64_t>(a - b)); }

/// The same stretch of time as both sides counted it: refused when no two clocks can differ like that.
Status check_clocks(std::uint64_t tag_ticks, std::uint64_t anchor_ticks, const char* stretch) {
  const auto anchor = static_cast<double>(anchor_ticks);
  const double apart = difference(tag_ticks, anchor_ticks);
  // Stamps are good to a few ticks, whatever the length of the stretch.
  constexpr double stamp_ticks = 128.0;
  if (anchor_ticks != 0 && std::abs(apart) <= anchor * clock_offset_ppm_max * 1e-6 + stamp_ticks) return {};
  return Error{
      fmt::format("two_way: {} is {} ticks by the tag and {} by the anchor, more than {:.0f} ppm apart: are the stamps "
                  "of one exchange, and is counter_bits right?",
                  stretch, tag_ticks, anchor_ticks, clock_offset_ppm_max)};
}

Result<double> ticks(const SingleSided& x, Counter counter) {
  const double offset_ppm = x.clock_offset_ppm.value_or(0.0);
  if (!(std::abs(offset_ppm) <= clock_offset_ppm_max)) {
    return Error{
        fmt::format("two_way: clock_offset_ppm {:.6g} is beyond +-{:.0f} ppm", offset_ppm, clock_offset_ppm_max)};
  }
  const std::uint64_t round = counter.between(x.poll_tx, x.reply_rx);
  const std::uint64_t answer = counter.between(x.poll_rx, x.reply_tx);
  const double offset = offset_ppm * 1e-6;
  // Half of round - answer / (1 + offset).
  return 0.5 * (difference(round, answer) + static_cast<double>(answer) * (offset / (1.0 + offset)));
}

Result<double> ticks(const DoubleSided& x, Counter counter) {
  const std::uint64_t tag_round = counter.between(x.poll_tx, x.reply_rx);
  const std::uint64_t tag_answer = counter.between(x.reply_rx, x.final_tx);
  const std::uint64_t anchor_answer = counter.between(x.poll_rx, x.reply_tx);
  const std::uint64_t anchor_round = counter.between(x.reply_tx, x.final_rx);
  if (auto status =
          check_clocks(counter.between(x.poll_tx, x.final_tx), counter.between(x.poll_rx, x.final_rx), "poll to final");
      !status) {
    return Error{status.error()};
  }
  const double first = difference(tag_round, anchor_answer);
  const double second = difference(anchor_round, tag_answer);
  if (x.symmetric) return 0.25 * (first + second);
  // (tag_round anchor_round - tag_answer anchor_answer) / (sum of the four), the products of long
  // intervals cancelled beforehand.
  const auto a = static_cast<double>(tag_answer);
  const auto b = static_cast<double>(anchor_answer);
  const double sum = 2.0 * (a + b) + first + second;
  if (!(sum > 0.0)) return Error{"two_way: all intervals are 0 ticks: are the stamps filled in?"};
  return (a * first + b * second + first * second) / sum;
}

Result<double> ticks(const SecondReply& x, Counter counter) {
  const std::uint64_t round = counter.between(x.poll_tx, x.reply_rx);
  const std::uint64_t answer = counter.between(x.poll_rx, x.reply_tx);
  const std::uint64_t tag_spacing = counter.between(x.reply_rx, x.second_reply_rx);
  const std::uint64_t anchor_spacing = counter.between(x.reply_tx, x.second_reply_tx);
  if (auto status = check_clocks(tag_spacing, anchor_spacing, "reply to second reply"); !status) {
    return Error{status.error()};
  }
  // Half of round - answer x tag_spacing / anchor_spacing.
  const double ratio_less_one = difference(tag_spacing, anchor_spacing) / static_cast<double>(anchor_spacing);
  return 0.5 * (difference(round, answer) - static_cast<double>(answer) * ratio_less_one);
}

}  // namespace

Result<double> time_of_flight_ticks(const TwoWay& stamps) {
  if (stamps.counter_bits < 16 || stamps.counter_bits > 64) {
    return Error{fmt::format("two_way: counter_bits {} is not within 16 to 64", stamps.counter_bits)};
  }
  const Counter counter(stamps.counter_bits);
  return std::visit([&](const auto& exchange) { return ticks(exchange, counter); }, stamps.exchange);
}

Result<double> two_way_range_m(const TwoWay& stamps, double propagation_speed_mps) {
  auto flight = time_of_flight_ticks(stamps);
  if (!flight) return flight;
  const double range_m = *flight * ranging_tick_s * propagation_speed_mps;
  const bool possible = range_m >= range_m_min && range_m <= range_m_max;
  if (!possible) {
    return Error{
        fmt::format("two_way: the stamps give {:.1f} m, not within {:.0f} to {:.0f} m: are they in ticks of 15.65 "
                    "ps, of one exchange, and is counter_bits {} right?",
                    range_m, range_m_min, range_m_max, stamps.counter_bits)};
  }
  return range_m;
}

}  // namespace kedge::wire
