#include "simulation/sensors.h"

#include <algorithm>
#include <cmath>

#include "core/assert.h"
#include "simulation/streams.h"

namespace kedge::simulation {

namespace {

// Standard atmosphere below 11 km (ISO 2533): pressure at a geopotential height.
double standard_pressure_pa(double height_m) { return 101325.0 * std::pow(1.0 - 0.0065 * height_m / 288.15, 5.255880); }

constexpr double pressure_drift_s = 300.0;

std::vector<double> drawn_biases_m(const ScenarioSpec& spec) {
  Random random(spec.seed, streams::range_bias);
  std::vector<double> biases_m;
  for (std::size_t i = 0; i < spec.site.anchors.size(); ++i) {
    biases_m.push_back(random.uniform(0.0, spec.faults.range_bias_max_m));
  }
  return biases_m;
}

}  // namespace

double Sensors::Drift::advance(Random& random, double dt_s) {
  const double kept = std::exp(-dt_s / correlation_s_);
  value_ = kept * value_ + sigma_ * std::sqrt(1.0 - kept * kept) * random.normal();
  return value_;
}

Sensors::Sensors(const ScenarioSpec& spec)
    : spec_(spec),
      vehicle_(spec),
      gyro_random_(spec.seed, streams::gyro),
      accel_random_(spec.seed, streams::accel),
      vibration_random_(spec.seed, streams::vibration),
      field_random_(spec.seed, streams::field),
      pressure_random_(spec.seed, streams::pressure),
      range_random_(spec.seed, streams::range_noise),
      loss_random_(spec.seed, streams::range_loss),
      obstruction_random_(spec.seed, streams::obstruction),
      gyro_bias_radps_(gyro_random_.normal_vector(spec.faults.gyro_bias_sigma_radps)),
      accel_bias_mps2_(accel_random_.normal_vector(spec.faults.accel_bias_sigma_mps2)),
      heading_drift_rad_(field_random_, spec.faults.heading_slow_rad, spec.faults.heading_slow_s),
      pressure_drift_pa_(pressure_random_, spec.faults.pressure_slow_pa, pressure_drift_s),
      range_bias_m_(drawn_biases_m(spec)),
      obstructed_(spec.site.anchors.size(), false) {
  KEDGE_ASSERT(spec.inertial_rate_hz > 0.0 && spec.range_rate_hz >= 0.0);
  KEDGE_ASSERT(spec.samples_per_packet >= 1 && !spec.site.anchors.empty());
  // The channel starts in its stationary state.
  std::generate(obstructed_.begin(), obstructed_.end(),
                [this] { return obstruction_random_.chance(spec_.faults.obstructed_share); });
}

std::optional<Reading> Sensors::next() {
  const auto anchors = static_cast<double>(spec_.site.anchors.size());
  const TimeNs sample_ns = spec_.start_ns + from_seconds(static_cast<double>(samples_) / spec_.inertial_rate_hz);
  const double ranging_rate_hz = spec_.range_rate_hz * anchors;
  // Rangings fall between inertial samples and are spread evenly over the anchors.
  const bool ranges = ranging_rate_hz > 0.0;
  const TimeNs ranging_ns =
      ranges ? spec_.start_ns + from_seconds((static_cast<double>(rangings_) + 0.37) / ranging_rate_hz) : sample_ns;
  const TimeNs end_ns = spec_.start_ns + from_seconds(spec_.duration_s);
  if (ranges && ranging_ns < sample_ns) {
    if (ranging_ns >= end_ns) return std::nullopt;
    const auto anchor = static_cast<std::uint32_t>(rangings_++ % spec_.site.anchors.size());
    return Reading{ranging_ns, range_at(ranging_ns, anchor)};
  }
  if (sample_ns >= end_ns) return std::nullopt;
  return Reading{sample_ns, inertial_at(sample_ns)};
}

InertialReading Sensors::inertial_at(TimeNs time_ns) {
  const Faults& f = spec_.faults;
  const double dt_s = 1.0 / spec_.inertial_rate_hz;
  const double root_rate = std::sqrt(spec_.inertial_rate_hz);
  const Truth truth = vehicle_.at(time_ns);
  const Vector3 pull = vehicle_.inertial_unit_acceleration_mps2(time_ns) + spec_.site.gravity_mps2 * Vector3::UnitZ();
  const Quaternion q_site_to_sensor = spec_.q_sensor_to_body.conjugate() * truth.q_body_to_site.conjugate();

  gyro_bias_radps_ += gyro_random_.normal_vector(f.gyro_walk_radps_rts * std::sqrt(dt_s));
  accel_bias_mps2_ += accel_random_.normal_vector(f.accel_walk_mps2_rts * std::sqrt(dt_s));
  const Vector3 vibration_mps2 = vibration_random_.normal_vector(f.vibration_mps2);

  InertialReading reading;
  reading.angular_rate_radps = spec_.q_sensor_to_body.conjugate() * truth.angular_rate_radps + gyro_bias_radps_ +
                               gyro_random_.normal_vector(f.gyro_noise_radps_rthz * root_rate);
  reading.specific_force_mps2 =
      q_site_to_sensor * pull + accel_bias_mps2_ + accel_random_.normal_vector(f.accel_noise_mps2_rthz * root_rate);
  if (truth.moving) reading.specific_force_mps2 += vibration_mps2;

  reading.ends_packet = ++samples_ % spec_.samples_per_packet == 0;
  if (reading.ends_packet) {
    if (spec_.magnetometer) reading.magnetic_field_ut = field_at(truth);
    if (profile_of(spec_.scenario) == fusion::Profile::flyer) reading.pressure_pa = pressure_at(truth);
  }
  return reading;
}

Vector3 Sensors::field_at(const Truth& truth) {
  const Faults& f = spec_.faults;
  const double dt_s = spec_.samples_per_packet / spec_.inertial_rate_hz;
  const double turned_rad =
      heading_drift_rad_.advance(field_random_, dt_s) + f.heading_white_rad * field_random_.normal();
  const double heading_rad = spec_.site.magnetic_north_heading_rad + turned_rad;
  const double strength_ut = spec_.site.field_ut.value_or(50.0);
  const double dip_rad = spec_.site.dip_rad.value_or(radians(60.0));
  const Vector3 field_in_site_ut = strength_ut * Vector3(std::cos(dip_rad) * std::cos(heading_rad),
                                                         std::cos(dip_rad) * std::sin(heading_rad), -std::sin(dip_rad));
  return spec_.q_sensor_to_body.conjugate() * (truth.q_body_to_site.conjugate() * field_in_site_ut) +
         field_random_.normal_vector(f.field_noise_ut);
}

double Sensors::pressure_at(const Truth& truth) {
  const double dt_s = spec_.samples_per_packet / spec_.inertial_rate_hz;
  return standard_pressure_pa(truth.position_m.z()) + pressure_drift_pa_.advance(pressure_random_, dt_s) +
         spec_.faults.pressure_noise_pa * pressure_random_.normal();
}

RangeReading Sensors::range_at(TimeNs time_ns, std::uint32_t anchor) {
  const Faults& f = spec_.faults;
  const double leave = 1.0 / std::max(1.0, f.obstruction_length);
  const double enter = f.obstructed_share < 1.0 ? leave * f.obstructed_share / (1.0 - f.obstructed_share) : 1.0;
  const bool was = obstructed_[anchor];
  obstructed_[anchor] = was ? !obstruction_random_.chance(leave) : obstruction_random_.chance(enter);
  const double excess_m = obstruction_random_.exponential(f.obstruction_excess_m);

  RangeReading reading;
  reading.anchor = anchor;
  reading.true_range_m = (vehicle_.at(time_ns).position_m - spec_.site.anchors[anchor].position_m).norm();
  reading.obstructed = obstructed_[anchor];
  reading.lost = loss_random_.chance(f.range_loss);
  reading.range_m = std::max(0.0, reading.true_range_m + range_bias_m_[anchor] +
                                      f.range_sigma_m * range_random_.normal() + (reading.obstructed ? excess_m : 0.0));
  return reading;
}

void as_measurements(const ScenarioSpec& spec, const Reading& reading, std::vector<fusion::Measurement>& out) {
  if (const auto* range = std::get_if<RangeReading>(&reading.body)) {
    const fusion::Anchor& anchor = spec.site.anchors[range->anchor];
    if (range->lost) return;
    out.push_back({reading.time_ns, fusion::RangeMeasurement{range->anchor, range->range_m, anchor.range_sigma_m}});
    return;
  }
  const auto& inertial = std::get<InertialReading>(reading.body);
  fusion::InertialMeasurement measurement;
  measurement.specific_force_mps2 = spec.q_sensor_to_body * inertial.specific_force_mps2;
  measurement.angular_rate_radps = spec.q_sensor_to_body * inertial.angular_rate_radps;
  measurement.has_field = inertial.magnetic_field_ut.has_value();
  if (measurement.has_field) measurement.magnetic_field_ut = spec.q_sensor_to_body * *inertial.magnetic_field_ut;
  out.push_back({reading.time_ns, measurement});
  if (inertial.pressure_pa) out.push_back({reading.time_ns, fusion::PressureMeasurement{*inertial.pressure_pa}});
}

std::vector<fusion::Measurement> measurements_of(const ScenarioSpec& spec) {
  std::vector<fusion::Measurement> measurements;
  Sensors sensors(spec);
  while (const auto reading = sensors.next()) as_measurements(spec, *reading, measurements);
  return measurements;
}

}  // namespace kedge::simulation
