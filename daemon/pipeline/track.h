// One tag's measurements and its estimator: order, rewinding, recovery.
//
// Measurements are filed as they arrive and applied in order of their own time when the tick asks for an
// estimate. One that is older than what was applied takes the estimator back to a mark before it, and the
// history since then is applied again; so the result does not hang on the order of arrival, as long as
// the delay stays within limits.delay_max_s. A sick estimator starts anew here and touches no other tag.
#pragma once

#include <array>
#include <functional>
#include <limits>
#include <memory>
#include <optional>
#include <vector>

#include "fusion/estimator.h"
#include "pipeline/history.h"
#include "pipeline/report.h"
#include "pipeline/settings.h"

namespace kedge::pipeline {

using EstimatorFactory = std::function<std::unique_ptr<fusion::Estimator>(const fusion::Site&, const fusion::Tag&)>;

/// Where each applied measurement's outcome goes, once for each.
using OutcomeSink = std::function<void(const Entry&, const fusion::Outcome&)>;

class Track {
 public:
  /// `site`, `tag` and `limits` must outlive the track.
  Track(const fusion::Site& site, const fusion::Tag& tag, const Limits& limits, const EstimatorFactory& factory,
        OutcomeSink outcome);

  /// Files a measurement that arrived at `arrival_ns`; used, or why it was refused (too_late, from_future).
  [[nodiscard]] VerdictCode file(const fusion::Measurement& measurement, TimeNs arrival_ns, wire::DeviceId device_id);

  /// Applies all that was filed, in order.
  void advance();

  /// At the time of the newest applied measurement, also where the estimator has just begun anew; nothing
  /// before the first measurement.
  [[nodiscard]] std::optional<fusion::Estimate> estimate() const;
  [[nodiscard]] std::uint32_t restarts() const { return restarts_; }

  void save(Saver& saver);
  void load(Loader& loader);

 private:
  struct Mark {
    Key key;
    bool valid = false;

    template <class Archive>
    void fields(Archive& archive) {
      archive(key, valid);
    }
  };
  static constexpr Key beginning = {std::numeric_limits<TimeNs>::min(), 0};

  void begin_at(const Key& key);
  void make_room();
  void apply(Entry& entry);
  void keep_mark();
  bool rewind_before(const Key& key);
  [[nodiscard]] std::size_t scratch_mark() const { return marks_.size(); }

  /// What of the track is its own, beside the estimator: all of it goes into a checkpoint.
  template <class Archive>
  void own_fields(Archive& archive) {
    archive(history_, marks_, newest_mark_, applied_, accepted_, restarts_);
  }

  const Limits& limits_;
  OutcomeSink outcome_;
  std::unique_ptr<fusion::Estimator> estimator_;
  History history_;
  std::vector<Mark> marks_;  ///< one fewer than the estimator has: the last is scratch space for save
  std::size_t newest_mark_ = 0;
  Key applied_ = beginning;
  std::uint64_t accepted_ = 0;
  std::uint32_t restarts_ = 0;
};

}  // namespace kedge::pipeline
