#include "pipeline/track.h"

#include <utility>

namespace kedge::pipeline {
namespace {

/// A measurement may lie this far after its arrival before its clock is called wrong.
constexpr TimeNs future_max_ns = 5 * ns_per_ms;

}  // namespace

Track::Track(const fusion::Site& site, const fusion::Tag& tag, const Limits& limits, const EstimatorFactory& factory,
             OutcomeSink outcome)
    : limits_(limits), outcome_(std::move(outcome)), estimator_(factory(site, tag)) {
  KEDGE_ASSERT(estimator_->marks() >= 3);
  marks_.resize(estimator_->marks() - 1);
  estimator_->reset(true);
  begin_at(beginning);
}

void Track::begin_at(const Key& key) {
  history_.clear();
  for (Mark& mark : marks_) mark.valid = false;
  newest_mark_ = 0;
  marks_[0] = {key, true};
  estimator_->keep(0);
  applied_ = key;
}

VerdictCode Track::file(const fusion::Measurement& measurement, TimeNs arrival_ns, wire::DeviceId device_id) {
  if (measurement.time_ns > arrival_ns + future_max_ns) return VerdictCode::from_future;
  if (arrival_ns - measurement.time_ns > limits_.delay_max_ns) return VerdictCode::too_late;
  const Key key = {measurement.time_ns, accepted_++};
  if (history_.full()) make_room();
  if (key < applied_ && !rewind_before(key)) return VerdictCode::too_late;
  Entry entry;
  entry.key = key;
  entry.arrival_ns = arrival_ns;
  entry.device_id = device_id;
  entry.body = measurement.body;
  history_.insert(entry);
  return VerdictCode::used;
}

std::optional<fusion::Estimate> Track::estimate() const {
  if (applied_ == beginning) return std::nullopt;
  fusion::Estimate estimate = estimator_->estimate();
  estimate.time_ns = applied_.time_ns;
  return estimate;
}

void Track::make_room() {
  // Without a tick for so long the oldest would be lost unapplied.
  if (history_[0].key > applied_) advance();
  if (!history_.full()) return;
  const Key dropped = history_[0].key;
  history_.drop_oldest();
  for (Mark& mark : marks_) {
    if (mark.key < dropped) mark.valid = false;
  }
}

bool Track::rewind_before(const Key& key) {
  std::size_t found = marks_.size();
  for (std::size_t i = 0; i < marks_.size(); ++i) {
    if (!marks_[i].valid || !(marks_[i].key < key)) continue;
    if (found == marks_.size() || marks_[found].key < marks_[i].key) found = i;
  }
  if (found == marks_.size()) return false;
  for (Mark& mark : marks_) {
    if (marks_[found].key < mark.key) mark.valid = false;
  }
  newest_mark_ = found;
  applied_ = marks_[found].key;
  estimator_->rewind(found);
  return true;
}

void Track::advance() {
  for (std::size_t i = history_.after(applied_); i < history_.size(); ++i) apply(history_[i]);
  if (!estimator_->healthy()) {
    estimator_->reset(false);
    ++restarts_;
    begin_at(applied_);
    return;
  }
  Key oldest = applied_;
  for (const Mark& mark : marks_) {
    if (mark.valid && mark.key < oldest) oldest = mark.key;
  }
  while (!history_.empty() && history_[0].key <= oldest) history_.drop_oldest();
}

void Track::apply(Entry& entry) {
  const fusion::Outcome came = estimator_->apply({entry.key.time_ns, entry.body});
  applied_ = entry.key;
  if (!entry.told) {
    entry.told = true;
    outcome_(entry, came);
  }
  keep_mark();
}

void Track::keep_mark() {
  // Marks spread over a little more than the longest delay, so that the oldest always lies before it.
  const TimeNs spacing_ns = limits_.delay_max_ns / static_cast<TimeNs>(marks_.size() - 2) + 1;
  const Key& newest = marks_[newest_mark_].key;
  if (newest != beginning && applied_.time_ns - newest.time_ns < spacing_ns) return;
  newest_mark_ = (newest_mark_ + 1) % marks_.size();
  marks_[newest_mark_] = {applied_, true};
  estimator_->keep(newest_mark_);
}

void Track::save(Saver& saver) {
  own_fields(saver);
  estimator_->save(saver);
  estimator_->keep(scratch_mark());
  for (std::size_t i = 0; i < marks_.size(); ++i) {
    if (!marks_[i].valid) continue;
    estimator_->rewind(i);
    estimator_->save(saver);
  }
  estimator_->rewind(scratch_mark());
}

void Track::load(Loader& loader) {
  const std::size_t expected = marks_.size();
  own_fields(loader);
  if (!loader.ok() || marks_.size() != expected || newest_mark_ >= expected) {
    loader.fail();
    marks_.assign(expected, Mark{});
    newest_mark_ = 0;
    return;
  }
  estimator_->load(loader);
  estimator_->keep(scratch_mark());
  for (std::size_t i = 0; i < marks_.size(); ++i) {
    if (!marks_[i].valid) continue;
    estimator_->load(loader);
    estimator_->keep(i);
  }
  estimator_->rewind(scratch_mark());
}

}  // namespace kedge::pipeline
