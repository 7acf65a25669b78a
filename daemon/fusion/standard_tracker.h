// One tag's estimator: the default method.
//
// From an unknown start and one anchor: a mixture of full filters, spread over the ring that the first ranges
// tell and thinned by what follows; mirror images live as long as nothing separates them, and one is put back on
// long straights, so that no side is ever taken for certain that the ranges have not decided. Ranges enter once,
// as ranges; a wheeled tag points where it goes; obstruction is one channel for all hypotheses. When the lead no
// longer explains the ranges, a new ring is put beside it and the evidence decides. MATHEMATICS.md, eq. 47 to 66.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <optional>

#include "fusion/attitude_filter.h"
#include "fusion/estimator.h"
#include "fusion/mixture.h"
#include "fusion/motion_history.h"
#include "fusion/opening.h"
#include "fusion/speed_check.h"
#include "fusion/stop_detector.h"

namespace kedge::fusion {

struct StandardState {
  TimeNs time_ns = 0;
  bool begun = false;  ///< time_ns means something
  bool first = true;   ///< the configured start still holds
  TimeNs begun_ns = 0;
  bool awake = false;

  /// Levels before there is a mixture, and gives the health figures of the field; not fed back.
  AttitudeFilter attitude;
  std::optional<double> told_heading_rad;  ///< by configuration or operator, before there was a mixture
  double told_heading_sigma_rad = 0.0;
  StopDetector stops;
  MotionHistory motion;
  double gained_mps = 0.0;       ///< forward, from the accelerometer alone
  InertialMeasurement inertial;  ///< the newest
  bool has_inertial = false;
  TimeNs inertial_ns = 0;
  bool at_rest = false;
  TimeNs rest_since_ns = 0;
  bool quiet = false;
  TimeNs quiet_since_ns = 0;
  bool moved = false;
  bool calm = false;
  Vector3 rest_force_mps2 = Vector3::Zero();  ///< body axes, when the tag came to rest

  Mixture mixture;
  Vector3 turned_rad = Vector3::Zero();  ///< integral of the angular rate since the profile was last applied, body axes
  double turned_s = 0.0;
  TimeNs field_ns = 0;        ///< last field used
  TimeNs constrained_ns = 0;  ///< when motion was last held to its profile
  TimeNs thinned_ns = 0;
  TimeNs doubled_ns = 0;  ///< when a mirror image was last put back
  TimeNs height_ns = 0;
  TimeNs seeded_ns = 0;

  SpeedCheck check;
  double obstructed = 0.05;  ///< probability that the last range was
  double doubt = 0.0;        ///< running share of ranges the lead does not explain
  TimeNs sure_ns = 0;        ///< when nothing spoke against the lead for the last time
  TimeNs range_ns = 0;
  double range_excess_m = 0.0;
  double range_gated_share = 0.0;

  bool airborne = false;         ///< height is integrated, pressure bounds it
  double pressure_zero_m = 0.0;  ///< standard height of site z = 0
  TimeNs pressure_ns = 0;

  TimeNs travel_ns = 0;
  double travel_turned_rad = 0.0;

  std::optional<CorrectionMeasurement> word;  ///< an operator's, said while waking

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, begun, first, begun_ns, awake, attitude, told_heading_rad, told_heading_sigma_rad, stops, motion,
            gained_mps, inertial, has_inertial, inertial_ns, at_rest, rest_since_ns, quiet, quiet_since_ns, moved, calm,
            rest_force_mps2, mixture, turned_rad, turned_s, field_ns, constrained_ns, thinned_ns, doubled_ns, height_ns,
            seeded_ns, check, obstructed, doubt, sure_ns, range_ns, range_excess_m, range_gated_share, airborne,
            pressure_zero_m, pressure_ns, travel_ns, travel_turned_rad, word);
  }
};

class StandardTracker final : public MarkedEstimator<StandardState, 12> {
 public:
  /// Both must outlive the tracker.
  StandardTracker(const Site& site, const Tag& tag);

  Outcome apply(const Measurement& measurement) override;
  [[nodiscard]] Estimate estimate() const override;
  [[nodiscard]] bool healthy() const override;
  void reset(bool first) override;

 private:
  // standard_tracker.cpp: time, inertial data, rest.
  void advance(TimeNs time_ns, const InertialMeasurement& held, bool use_field);
  void step(double dt_s, const InertialMeasurement& held, bool use_field, bool blind);
  void level(double dt_s, const InertialMeasurement& held, bool use_field);
  void begin_anew_after_gap();
  Outcome take(const InertialMeasurement& measurement);
  void judge_rest();
  [[nodiscard]] bool ranges_move() const;
  /// At rest, or turning on the spot before ever having moved.
  [[nodiscard]] bool stands() const;
  [[nodiscard]] bool moves_softly() const;
  [[nodiscard]] bool leans() const;
  [[nodiscard]] bool fast() const;
  void hold_to_profile();
  void take_field(const Vector3& field_ut);
  void catch_up();
  void wake();

  // standard_bank.cpp: where hypotheses come from.
  /// The anchor that is heard.
  [[nodiscard]] Vector3 pivot_m() const;
  /// Attitude and biases as they are known before any range; its covariance is plain.
  [[nodiscard]] Component waking_component() const;
  void start_at(const Vector2& antenna_m, double sigma_m);
  void seed(double weight);
  void seed_standing(const Component& base, double range_m, double weight);
  void seed_moving(const Component& base, double range_m, double weight);
  /// Level position on the ring; the covariance is plain.
  void place(Component& component, double range_m, double bearing_rad, double across_sigma_m) const;
  void split_wide();
  void double_lead();

  // standard_range.cpp: what a range does.
  Outcome take(const RangeMeasurement& measurement);
  void remember(const RangeMeasurement& measurement);
  Outcome weigh(const RangeMeasurement& measurement);
  void look_after();
  [[nodiscard]] bool doubtful() const;

  // standard_aid.cpp: pressure, wheels, the operator's word.
  Outcome take(const PressureMeasurement& measurement);
  Outcome take(const TravelMeasurement& measurement);
  Outcome take(const CorrectionMeasurement& measurement);
  void correct_position(const CorrectionMeasurement& measurement);
  void correct_heading(double heading_rad, double sigma_rad);

  /// One scalar measurement for all components: updates and, where `weighs`, evidence. `of` linearises it.
  template <class Linearise>
  void update_all(const Linearise& of, bool weighs);

  /// The heading tells the course, up to the profile's sideways speed.
  [[nodiscard]] bool points_where_it_goes() const {
    return tag_.profile == Profile::wheeled || tag_.profile == Profile::walker;
  }
  [[nodiscard]] bool located() const { return !state_.mixture.empty(); }
  [[nodiscard]] FullFilter& lead() { return state_.mixture.lead().filter; }
  [[nodiscard]] const FullFilter& lead() const { return state_.mixture.lead().filter; }
  [[nodiscard]] double antenna_up_m() const { return site_.ground_up_m + tag_.antenna_height_m; }

  const Site& site_;
  const Tag& tag_;
  AttitudeModel attitude_model_;
  FullModel model_;
  double sideways_sigma_mps_;
};

template <class Linearise>
void StandardTracker::update_all(const Linearise& of, bool weighs) {
  Mixture::LogLikelihoods likelihoods{};
  for (std::size_t i = 0; i < state_.mixture.size(); ++i) {
    FullFilter& filter = state_.mixture[i].filter;
    const FullLinearised measurement = of(filter);
    if (weighs && state_.mixture.size() > 1) {
      const double variance = filter.innovation_variance(measurement);
      // Never worth more than a stray of five sigma: models of motion are not exact.
      const double square = std::min(measurement.innovation * measurement.innovation / variance, 25.0);
      likelihoods[i] = -0.5 * (square + std::log(variance));
    }
    filter.update(measurement);
  }
  if (weighs) state_.mixture.reweigh(likelihoods);
}

}  // namespace kedge::fusion
