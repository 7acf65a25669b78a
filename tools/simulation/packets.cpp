#include "simulation/packets.h"

#include <cmath>
#include <utility>

#include "core/assert.h"
#include "simulation/streams.h"
#include "wire/encode.h"

namespace kedge::simulation {

DeviceClock::DeviceClock(const ScenarioSpec& spec) : zero_ns_(spec.start_ns), wraps_(spec.clock_bits == 32) {
  KEDGE_ASSERT(spec.clock_bits == 32 || spec.clock_bits == 64);
  Random random(spec.seed, streams::clock);
  skew_ppm_ = random.uniform(-spec.faults.clock_skew_max_ppm, spec.faults.clock_skew_max_ppm);
  // Some hours after power-up, or anywhere in the turn of a 32-bit counter.
  const double origin_us = random.uniform(0.0, 4294967296.0);
  if (spec.faults.clock_random_origin) origin_us_ = static_cast<std::uint64_t>(origin_us);
  if (spec.faults.clock_wrap_after_s) {
    wraps_ = true;
    origin_us_ = (std::uint64_t{1} << 32U) - static_cast<std::uint64_t>(*spec.faults.clock_wrap_after_s * 1e6);
  }
}

std::uint64_t DeviceClock::reading_us(TimeNs time_ns) const {
  const double elapsed_us = seconds(time_ns - zero_ns_) * 1e6 * (1.0 + 1e-6 * skew_ppm_);
  const std::uint64_t reading_us =
      origin_us_ + static_cast<std::uint64_t>(std::max(0.0, std::floor(elapsed_us + 1e-3)));
  return wraps_ ? reading_us & 0xFFFFFFFFU : reading_us;
}

void DeviceClock::restart(TimeNs time_ns) {
  zero_ns_ = time_ns;
  origin_us_ = 0;
}

PacketStream::PacketStream(const ScenarioSpec& spec, std::uint32_t tag)
    : spec_(spec), tag_(tag), sensors_(spec), clock_(spec), link_random_(spec.seed, streams::link) {
  Random counters(spec.seed, streams::counters);
  for (std::size_t i = 0; i <= spec.site.anchors.size(); ++i) {
    counters_.emplace_back(counters, spec.faults.counter_skew_max_ppm);
  }
  if (spec.faults.restart_after_s) restart_ns_ = spec.start_ns + from_seconds(*spec.faults.restart_after_s);
  ahead_ = sensors_.next();
}

std::optional<Arrival> PacketStream::next() {
  while (ahead_ && (queue_.empty() || queue_.top().arrival.time_ns >= ahead_->time_ns)) {
    take(*ahead_);
    ahead_ = sensors_.next();
  }
  if (queue_.empty()) return std::nullopt;
  Arrival arrival = queue_.top().arrival;
  queue_.pop();
  return arrival;
}

void PacketStream::take(const Reading& reading) {
  if (restart_ns_ && reading.time_ns >= *restart_ns_) restart(reading.time_ns);
  if (const auto* range = std::get_if<RangeReading>(&reading.body)) {
    if (!range->lost) take_range(reading.time_ns, *range);
  } else {
    take_inertial(reading.time_ns, std::get<InertialReading>(reading.body));
  }
}

void PacketStream::restart(TimeNs time_ns) {
  clock_.restart(time_ns);
  sequence_ = 0;
  batch_.Clear();
  bundle_.Clear();
  restart_ns_.reset();
}

packets::v1::Packet& PacketStream::new_packet(packets::v1::Datagram& datagram, TimeNs time_ns) {
  packets::v1::Packet& packet = *datagram.add_packets();
  packet.set_device_id(spec_.device_id);
  packet.set_sequence(sequence_++);
  packet.set_device_time_us(clock_.reading_us(time_ns));
  return packet;
}

void PacketStream::take_inertial(TimeNs time_ns, const InertialReading& reading) {
  packets::v1::Inertial& inertial = *batch_.mutable_inertial();
  if (inertial.specific_force_mps2_size() == 0) {
    batch_.set_device_time_us(clock_.reading_us(time_ns));
    inertial.set_sample_interval_us(static_cast<std::uint32_t>(std::lround(1e6 / spec_.inertial_rate_hz)));
  }
  for (const double value : reading.specific_force_mps2) inertial.add_specific_force_mps2(static_cast<float>(value));
  for (const double value : reading.angular_rate_radps) inertial.add_angular_rate_radps(static_cast<float>(value));
  if (!reading.ends_packet) return;
  if (reading.magnetic_field_ut) {
    for (const double value : *reading.magnetic_field_ut) inertial.add_magnetic_field_ut(static_cast<float>(value));
  }
  if (reading.pressure_pa) inertial.set_pressure_pa(static_cast<float>(*reading.pressure_pa));

  packets::v1::Datagram datagram = std::exchange(bundle_, {});
  const std::uint64_t first_sample_us = batch_.device_time_us();
  packets::v1::Packet& packet = new_packet(datagram, time_ns);
  packet.set_device_time_us(first_sample_us);
  *packet.mutable_inertial() = inertial;
  batch_.Clear();
  send(time_ns, datagram);
}

void PacketStream::take_range(TimeNs time_ns, const RangeReading& reading) {
  packets::v1::Datagram alone;
  packets::v1::Datagram& datagram = spec_.bundled ? bundle_ : alone;
  packets::v1::Range& range = *new_packet(datagram, time_ns).mutable_range();
  range.set_anchor_id(spec_.site.anchors[reading.anchor].anchor_id);
  if (spec_.range_form == RangeForm::distance) {
    range.mutable_distance()->set_distance_m(static_cast<float>(reading.range_m));
  } else {
    fill_two_way(spec_.range_form, time_ns, reading.range_m, spec_.site.propagation_speed_mps, counters_[0],
                 counters_[1 + reading.anchor], spec_.counter_bits, range);
  }
  if (!spec_.bundled) send(time_ns, alone);
}

void PacketStream::send(TimeNs time_ns, const packets::v1::Datagram& datagram) {
  const Faults& f = spec_.faults;
  // Drawn whether used or not, so that one fault's figure does not shift the draws of the others.
  const bool lost = link_random_.chance(f.datagram_loss);
  const bool repeated = link_random_.chance(f.datagram_duplicate);
  const bool held = link_random_.chance(f.datagram_held);
  const double held_s = link_random_.uniform(0.0, f.datagram_held_s);
  const double delay_s = f.delay_min_s + link_random_.exponential(f.delay_jitter_s);
  const double again_s = f.delay_min_s + link_random_.exponential(f.delay_jitter_s);
  if (lost) return;
  std::vector<std::byte> bytes = wire::encode(datagram);
  if (repeated) enqueue(time_ns + from_seconds(again_s), bytes);
  enqueue(time_ns + from_seconds(delay_s + (held ? held_s : 0.0)), std::move(bytes));
}

void PacketStream::enqueue(TimeNs time_ns, std::vector<std::byte> bytes) {
  queue_.push({{time_ns, tag_, std::move(bytes)}, queued_++});
}

Fleet::Fleet(const std::vector<ScenarioSpec>& specs) {
  for (std::uint32_t tag = 0; tag < specs.size(); ++tag) {
    streams_.emplace_back(specs[tag], tag);
    heads_.push_back(streams_.back().next());
  }
}

std::optional<Arrival> Fleet::next() {
  std::optional<std::size_t> first;
  for (std::size_t i = 0; i < heads_.size(); ++i) {
    if (heads_[i] && (!first || heads_[i]->time_ns < heads_[*first]->time_ns)) first = i;
  }
  if (!first) return std::nullopt;
  return std::exchange(heads_[*first], streams_[*first].next());
}

}  // namespace kedge::simulation
