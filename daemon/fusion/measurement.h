// What an estimator is given, in order of measurement time: body axes, SI units, station time.
//
// The pipeline has already applied what is configured: mounting rotation, hard and soft iron, range
// scale and bias, range lag. Times are of the measurement, not of its arrival.
#pragma once

#include <cstdint>
#include <optional>
#include <variant>

#include "core/rotation.h"
#include "core/time.h"

namespace kedge::fusion {

struct InertialMeasurement {
  Vector3 specific_force_mps2 = Vector3::Zero();  ///< body axes; +g upwards at rest
  Vector3 angular_rate_radps = Vector3::Zero();   ///< body axes
  Vector3 magnetic_field_ut = Vector3::Zero();    ///< body axes, where has_field
  bool has_field = false;

  template <class Archive>
  void fields(Archive& archive) {
    archive(specific_force_mps2, angular_rate_radps, magnetic_field_ut, has_field);
  }
};

struct RangeMeasurement {
  std::uint32_t anchor = 0;  ///< index into Site::anchors
  double range_m = 0.0;      ///< slant, antenna to antenna; positive error: too long
  double sigma_m = 0.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(anchor, range_m, sigma_m);
  }
};

struct PressureMeasurement {
  double pressure_pa = 0.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(pressure_pa);
  }
};

struct TravelMeasurement {
  TimeNs interval_ns = 0;  ///< the increments cover the interval that ends at the measurement's time
  std::optional<double> distance_m;
  std::optional<double> turn_rad;

  template <class Archive>
  void fields(Archive& archive) {
    archive(interval_ns, distance_m, turn_rad);
  }
};

/// An operator's word: the tag stands there, or points there.
struct CorrectionMeasurement {
  std::optional<Vector2> position_m;  ///< site east, north
  std::optional<double> up_m;
  double position_sigma_m = 0.5;
  std::optional<double> heading_rad;  ///< from site east, counter-clockwise
  double heading_sigma_rad = 0.0873;

  template <class Archive>
  void fields(Archive& archive) {
    archive(position_m, up_m, position_sigma_m, heading_rad, heading_sigma_rad);
  }
};

using MeasurementBody =
    std::variant<InertialMeasurement, RangeMeasurement, PressureMeasurement, TravelMeasurement, CorrectionMeasurement>;

struct Measurement {
  TimeNs time_ns = 0;
  MeasurementBody body;
};

/// What became of one measurement inside the estimator, with the figures that rests on.
struct Outcome {
  enum class Code : std::uint8_t {
    used,         ///< it changed the estimate
    noted,        ///< kept for later or for a check, the estimate is as before
    gated,        ///< its innovation lies beyond the gate
    implausible,  ///< not finite, or outside what the model can take
  };
  Code code = Code::noted;
  double innovation = 0.0;  ///< measured minus predicted, the measurement's unit
  double sigma = 0.0;       ///< of the innovation, same unit
  double gate = 0.0;        ///< |innovation| / sigma allowed
};

}  // namespace kedge::fusion
