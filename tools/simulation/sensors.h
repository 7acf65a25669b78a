// What the tag's sensors and radio read, faults included, in order of true time.
//
// Readings are in the sensor's own axes. `as_measurement` turns one into what an estimator is given:
// body axes and station time, as the pipeline does with packets.
#pragma once

#include <cstdint>
#include <optional>
#include <variant>
#include <vector>

#include "fusion/measurement.h"
#include "simulation/scenario.h"
#include "simulation/vehicle.h"

namespace kedge::simulation {

struct InertialReading {
  Vector3 specific_force_mps2 = Vector3::Zero();
  Vector3 angular_rate_radps = Vector3::Zero();
  std::optional<Vector3> magnetic_field_ut;  ///< at the last sample of a packet
  std::optional<double> pressure_pa;         ///< same; flyers only
  bool ends_packet = false;
};

struct RangeReading {
  std::uint32_t anchor = 0;  ///< index into the site's anchors
  double range_m = 0.0;      ///< as read
  double true_range_m = 0.0;
  bool obstructed = false;
  bool lost = false;  ///< the ranging failed: nothing is sent
};

struct Reading {
  TimeNs time_ns = 0;  ///< station time of the measurement, exactly
  std::variant<InertialReading, RangeReading> body;
};

class Sensors {
 public:
  explicit Sensors(const ScenarioSpec& spec);

  /// The next reading, lost rangings included; nothing after the duration.
  [[nodiscard]] std::optional<Reading> next();
  [[nodiscard]] const Vehicle& vehicle() const { return vehicle_; }
  /// The constant error of each anchor's ranges.
  [[nodiscard]] const std::vector<double>& range_bias_m() const { return range_bias_m_; }

 private:
  /// A first-order Gauss-Markov process, advanced by dt at a time.
  class Drift {
   public:
    Drift(Random& random, double sigma, double correlation_s)
        : sigma_(sigma), correlation_s_(correlation_s), value_(sigma * random.normal()) {}
    double advance(Random& random, double dt_s);

   private:
    double sigma_;
    double correlation_s_;
    double value_;
  };

  InertialReading inertial_at(TimeNs time_ns);
  Vector3 field_at(const Truth& truth);
  double pressure_at(const Truth& truth);
  RangeReading range_at(TimeNs time_ns, std::uint32_t anchor);

  ScenarioSpec spec_;
  Vehicle vehicle_;
  Random gyro_random_, accel_random_, vibration_random_, field_random_, pressure_random_;
  Random range_random_, loss_random_, obstruction_random_;
  Vector3 gyro_bias_radps_;
  Vector3 accel_bias_mps2_;
  Drift heading_drift_rad_;
  Drift pressure_drift_pa_;
  std::vector<double> range_bias_m_;
  std::vector<bool> obstructed_;  ///< each anchor's channel
  std::uint64_t samples_ = 0;
  std::uint64_t rangings_ = 0;
};

/// In body axes; an inertial reading with pressure gives two measurements. Lost rangings give none.
void as_measurements(const ScenarioSpec& spec, const Reading& reading, std::vector<fusion::Measurement>& out);

/// The whole run as an estimator would see it were nothing delayed or lost on the link.
[[nodiscard]] std::vector<fusion::Measurement> measurements_of(const ScenarioSpec& spec);

}  // namespace kedge::simulation
