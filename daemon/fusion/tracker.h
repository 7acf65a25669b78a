// One tag's estimator: the published speed-aided method, and the plain one it is compared with.
//
// The attitude filter gives the heading, the ranges' shape the speed along it, and one or two position
// filters hold what follows. A hypothesis is a position filter and its weight; two live while the ranges
// cannot tell the tag from its mirror image in the line through the anchor along the course.
// `plain` shares everything but what the method adds: no speed from ranges, no "points where it goes", no start
// from ranges. MATHEMATICS.md, eq. 34 to 46.
#pragma once

#include <array>
#include <cstdint>
#include <optional>

#include "fusion/attitude_filter.h"
#include "fusion/estimator.h"
#include "fusion/motion_history.h"
#include "fusion/opening.h"
#include "fusion/position_filter.h"
#include "fusion/range_speed.h"
#include "fusion/stop_detector.h"

namespace kedge::fusion {

struct Hypothesis {
  PositionFilter filter;
  double weight = 1.0;

  template <class Archive>
  void fields(Archive& archive) {
    archive(filter, weight);
  }
};

/// Speed from the ranges of a window alone.
struct CheckSpeed {
  TimeNs time_ns = 0;
  double speed_mps = 0.0;
  double sigma_mps = 0.0;
  TimeNs window_ns = 0;  ///< how long a window it came from

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, speed_mps, sigma_mps, window_ns);
  }
};

struct TrackerState {
  TimeNs time_ns = 0;
  bool begun = false;  ///< time_ns means something
  bool first = true;   ///< the configured start still holds
  Phase phase = Phase::waking;
  TimeNs begun_ns = 0;

  AttitudeFilter attitude;
  StopDetector stops;
  MotionHistory motion;
  double gained_mps = 0.0;       ///< forward, from the accelerometer alone
  InertialMeasurement inertial;  ///< the newest
  bool has_inertial = false;
  TimeNs inertial_ns = 0;
  bool at_rest = false;
  TimeNs quiet_since_ns = 0;  ///< of the inertial unit; meaningful while `quiet`
  bool quiet = false;
  bool moved = false;                         ///< since the start
  bool calm = false;                          ///< the accelerometer shows gravity alone
  Vector3 rest_force_mps2 = Vector3::Zero();  ///< body axes, when the tag came to rest

  /// The first is the lead. Before there is a position it carries the heading error alone.
  std::array<Hypothesis, 2> hypotheses;
  bool twins = false;
  TimeNs lopsided_since_ns = 0;  ///< since when the mirror has been unlikely
  TimeNs sideways_ns = 0;        ///< when the sideways speed was last constrained

  Vector2 path_s = Vector2::Zero();
  RangeWindow window;
  std::uint32_t window_anchor = 0;
  TimeNs window_try_ns = 0;   ///< when the window was last solved
  TimeNs speed_fused_ns = 0;  ///< newest range of the last window whose speed was used
  std::int32_t speeds_refused = 0;
  std::optional<CheckSpeed> check;

  double obstructed = 0.05;  ///< probability that the last range was
  TimeNs range_ns = 0;       ///< last range, of any anchor
  TimeNs range_used_ns = 0;
  std::int32_t ranges_refused = 0;  ///< since the last used one
  double range_excess_m = 0.0;
  double range_gated_share = 0.0;
  std::optional<double> ring_radius_m;

  bool airborne = false;         ///< height is integrated, pressure bounds it
  double pressure_zero_m = 0.0;  ///< standard height of site z = 0
  TimeNs pressure_ns = 0;

  TimeNs travel_ns = 0;
  double travel_turned_rad = 0.0;

  std::optional<CorrectionMeasurement> word;  ///< an operator's, said while waking

  template <class Archive>
  void fields(Archive& archive) {
    archive(time_ns, begun, first, phase, begun_ns, attitude, stops, motion, gained_mps, inertial, has_inertial,
            inertial_ns, at_rest, quiet_since_ns, quiet, moved, calm, rest_force_mps2, hypotheses, twins,
            lopsided_since_ns, sideways_ns, path_s, window, window_anchor, window_try_ns, speed_fused_ns,
            speeds_refused, check, obstructed, range_ns, range_used_ns, ranges_refused, range_excess_m,
            range_gated_share, ring_radius_m, airborne, pressure_zero_m, pressure_ns, travel_ns, travel_turned_rad,
            word);
  }
};

/// A late measurement costs one copy of this; two dozen are kept for each tag.
static_assert(sizeof(TrackerState) < std::size_t{40} * 1024);

class Tracker final : public MarkedEstimator<TrackerState, 24> {
 public:
  /// Both must outlive the tracker.
  Tracker(const Site& site, const Tag& tag);

  Outcome apply(const Measurement& measurement) override;
  [[nodiscard]] Estimate estimate() const override;
  [[nodiscard]] bool healthy() const override;
  void reset(bool first) override;

 private:
  // tracker.cpp: time, inertial data, the phases.
  void advance(TimeNs time_ns, const InertialMeasurement& held, bool use_field);
  void step(double dt_s, const InertialMeasurement& held, bool use_field, bool blind);
  void turn_attitude(const AttitudeInput& input);
  void begin_anew_after_gap();
  Outcome take(const InertialMeasurement& measurement);
  void judge_rest();
  [[nodiscard]] std::optional<RangeRate> recent_range_rate() const;
  [[nodiscard]] bool ranges_move() const;
  [[nodiscard]] bool leans() const;
  [[nodiscard]] bool moves_softly() const;
  [[nodiscard]] bool fast() const;
  void leave_rest();
  void come_to_rest();
  void constrain_sideways();
  void wake();
  void start_at(const Vector2& antenna_m, double sigma_m);
  void extend_path(double dt_s);

  // tracker_range.cpp: what a range does.
  Outcome take(const RangeMeasurement& measurement);
  void remember(const RangeMeasurement& measurement);
  Outcome weigh(const RangeMeasurement& measurement);
  void decide_between_twins();
  void order_twins();
  void drop_mirror();
  void recover();
  void solve_window();
  void use_speed(double speed_mps, double sigma_mps, TimeNs window_ns);
  void seed_from_window();
  [[nodiscard]] Hypothesis hypothesis_of(const ShapedFit& fit) const;

  // tracker_aid.cpp: pressure, wheels, the operator's word.
  Outcome take(const PressureMeasurement& measurement);
  Outcome take(const TravelMeasurement& measurement);
  Outcome take(const CorrectionMeasurement& measurement);
  void correct_position(const CorrectionMeasurement& measurement);
  void correct_heading(double heading_rad, double sigma_rad);

  [[nodiscard]] bool speed_aided() const { return tag_.method == Method::speed_aided; }
  /// The heading tells the course, up to the profile's sideways speed.
  [[nodiscard]] bool points_where_it_goes() const {
    return tag_.profile == Profile::wheeled || tag_.profile == Profile::walker;
  }
  [[nodiscard]] bool located() const { return state_.phase == Phase::single || state_.phase == Phase::twofold; }
  [[nodiscard]] std::size_t alive() const { return state_.twins ? 2 : 1; }
  [[nodiscard]] PositionFilter& lead() { return state_.hypotheses[0].filter; }
  [[nodiscard]] const PositionFilter& lead() const { return state_.hypotheses[0].filter; }
  [[nodiscard]] Vector3 lever_in_site_m() const { return state_.attitude.q_body_to_site * tag_.antenna_in_body_m; }
  [[nodiscard]] double antenna_up_m() const { return site_.ground_up_m + tag_.antenna_height_m; }
  [[nodiscard]] Mode mode_of(const Hypothesis& hypothesis) const;

  const Site& site_;
  const Tag& tag_;
  AttitudeModel attitude_model_;
  FilterModel filter_model_;
  double sideways_sigma_mps_;
};

}  // namespace kedge::fusion
