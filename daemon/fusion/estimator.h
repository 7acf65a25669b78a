// The seam between a tag's pipeline and the method that estimates it.
//
// The pipeline hands over measurements in order of their time and, when a late one comes, goes back to
// a mark before it and hands over everything since again. An estimator therefore is a deterministic
// function of the measurements in order: it asks no clock, draws no random number, and after
// construction allocates nothing.
#pragma once

#include <cstddef>
#include <memory>

#include "core/archive.h"
#include "fusion/estimate.h"
#include "fusion/measurement.h"
#include "fusion/site.h"

namespace kedge::fusion {

class Estimator {
 public:
  Estimator() = default;
  Estimator(const Estimator&) = delete;
  Estimator& operator=(const Estimator&) = delete;
  virtual ~Estimator() = default;

  /// Takes one measurement; measurement.time_ns must not be below that of the one before.
  virtual Outcome apply(const Measurement& measurement) = 0;

  /// What is known after the last measurement, at its time.
  [[nodiscard]] virtual Estimate estimate() const = 0;

  /// False when the state is not finite or a covariance is not positive: the pipeline then restarts it.
  [[nodiscard]] virtual bool healthy() const = 0;

  /// As new: for the start and for a sick filter. The configured start position is used only where
  /// `first` is true, since a tag that ran has moved.
  virtual void reset(bool first) = 0;

  /// Marks are numbered places for copies of the state; rewinding to one costs one copy.
  /// Precondition: mark < marks().
  [[nodiscard]] virtual std::size_t marks() const = 0;
  virtual void keep(std::size_t mark) = 0;
  virtual void rewind(std::size_t mark) = 0;

  /// The current state (not the marks) for a checkpoint.
  virtual void save(Saver& saver) = 0;
  virtual void load(Loader& loader) = 0;
};

/// Builds the estimator that tag.method names. `site` and `tag` must outlive it.
[[nodiscard]] std::unique_ptr<Estimator> make_estimator(const Site& site, const Tag& tag);

/// Implements marks, copying and archiving for a method whose whole state is one plain struct.
template <class State, std::size_t mark_count>
class MarkedEstimator : public Estimator {
 public:
  MarkedEstimator() : kept_(mark_count) {}

  [[nodiscard]] std::size_t marks() const final { return mark_count; }
  void keep(std::size_t mark) final { kept_.at(mark) = state_; }
  void rewind(std::size_t mark) final { state_ = kept_.at(mark); }
  void save(Saver& saver) final { saver(state_); }
  void load(Loader& loader) final { loader(state_); }

 protected:
  State state_{};

 private:
  std::vector<State> kept_;
};

}  // namespace kedge::fusion
