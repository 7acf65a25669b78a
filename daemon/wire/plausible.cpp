#include "wire/plausible.h"

#include <fmt/core.h>

#include <algorithm>
#include <cmath>
#include <span>

#include "wire/two_way.h"

namespace kedge::wire {
namespace {

struct Bounds {
  const char* field;
  double low;
  double high;
  const char* unit;
  const char* remedy;  ///< appended; may be empty
};

constexpr double specific_force_mps2_max = 400.0;
constexpr double angular_rate_radps_max = 70.0;
constexpr double magnetic_field_ut_max = 2000.0;

constexpr Bounds interval_us{"inertial: sample_interval_us", 1, 1'000'000, "us", "; is it in ms or ns?"};
constexpr Bounds pressure_pa{"inertial: pressure_pa", 30'000, 120'000, "Pa", "; is it in hPa or kPa?"};
constexpr Bounds temperature_degc{"inertial: temperature_degc", -100, 200, "degC", "; is it in kelvin?"};
constexpr Bounds battery_v{"inertial: battery_v", 0, 1000, "V", "; is it in mV?"};
constexpr Bounds range_m{"range: distance_m", range_m_min, range_m_max, "m", "; is it in mm or cm?"};
constexpr Bounds sigma_m{"range: sigma_m", 1e-4, 1000, "m", "; leave it out where it is not known"};
constexpr Bounds received_dbm{"range: received_power_dbm", -200, 50, "dBm", ""};
constexpr Bounds first_path_dbm{"range: first_path_power_dbm", -200, 50, "dBm", ""};
constexpr Bounds travel_interval_us{"travel: interval_us", 1, 60'000'000, "us", "; is it in ms or ns?"};
// Over at most a minute.
constexpr Bounds travel_m{"travel: distance_m", -6000, 6000, "m",
                          "; it is the increment over interval_us, not the sum"};
constexpr Bounds turn_rad{"travel: turn_rad", -4200, 4200, "rad",
                          "; it is the increment over interval_us, not the sum"};

Status within(double value, const Bounds& bounds) {
  if (value >= bounds.low && value <= bounds.high) return {};  // a comparison with NaN is false
  return Error{fmt::format("{} {:.6g} is not within {:.6g} to {:.6g} {}{}", bounds.field, value, bounds.low,
                           bounds.high, bounds.unit, bounds.remedy)};
}

Status within(const std::optional<double>& value, const Bounds& bounds) {
  return value ? within(*value, bounds) : Status{};
}

Status all(std::initializer_list<Status> checks) {
  const auto bad = std::find_if(checks.begin(), checks.end(), [](const Status& status) { return !status.ok(); });
  return bad == checks.end() ? Status{} : *bad;
}

Status shorter(const Vector3& v, double max, const char* field, std::size_t sample, const char* remedy) {
  if (v.norm() <= max) return {};
  return Error{fmt::format("inertial: {} ({:.6g}, {:.6g}, {:.6g}) of sample {} is longer than {:.6g}{}", field, v.x(),
                           v.y(), v.z(), sample + 1, max, remedy)};
}

/// A resting sensor that reports in g reads 1.00 all the time. In m/s2 that is nearly free fall; it may
/// be passed through, but not kept to 5 % over several samples and without turning.
Status in_metric_units(std::span<const InertialSample> samples) {
  constexpr std::size_t samples_min = 4;
  const bool rests_at_one = std::all_of(samples.begin(), samples.end(), [](const InertialSample& sample) {
    return std::abs(sample.specific_force_mps2.norm() - 1.0) < 0.05 && sample.angular_rate_radps.norm() < 0.1;
  });
  if (samples.size() < samples_min || !rests_at_one) return {};
  const Vector3& first = samples.front().specific_force_mps2;
  return Error{
      fmt::format("inertial: specific_force_mps2 ({:.3f}, {:.3f}, {:.3f}) keeps a length of 1.0 m/s2 at rest, where "
                  "9.8 is right; is it in g?",
                  first.x(), first.y(), first.z())};
}

Status check(const InertialBatch& batch) {
  const std::span samples(batch.samples.data(), batch.count);
  if (batch.count > 1 || batch.sample_interval_us != 0) {
    if (auto status = within(batch.sample_interval_us, interval_us); !status) return status;
  }
  for (std::size_t i = 0; i < samples.size(); ++i) {
    const InertialSample& sample = samples[i];
    auto status = shorter(sample.specific_force_mps2, specific_force_mps2_max, "specific_force_mps2", i,
                          " m/s2; is it in raw counts or mg?");
    if (!status) return status;
    status =
        shorter(sample.angular_rate_radps, angular_rate_radps_max, "angular_rate_radps", i, " rad/s; is it in deg/s?");
    if (!status) return status;
    if (!sample.has_field) continue;
    status =
        shorter(sample.magnetic_field_ut, magnetic_field_ut_max, "magnetic_field_ut", i, " uT; is it in nT or mG?");
    if (!status) return status;
  }
  return all({in_metric_units(samples), within(batch.pressure_pa, pressure_pa),
              within(batch.temperature_degc, temperature_degc), within(batch.battery_v, battery_v)});
}

Status check(const Range& range) {
  return all({within(range.range_m, range_m), within(range.sigma_m, sigma_m),
              within(range.received_power_dbm, received_dbm), within(range.first_path_power_dbm, first_path_dbm)});
}

Status check(const Travel& travel) {
  return all({within(travel.interval_us, travel_interval_us), within(travel.distance_m, travel_m),
              within(travel.turn_rad, turn_rad)});
}

}  // namespace

Status check_plausible(const Packet& packet) {
  return std::visit([](const auto& body) { return check(body); }, packet.body);
}

}  // namespace kedge::wire
