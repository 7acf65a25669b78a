// From reports to messages: the one canonical, numbered stream, the same live and in a replay.
//
// Publish time and latency are no part of a message, so that a replay gives the same bytes.
#pragma once

#include <cstdint>

#include "pipeline/report.h"
#include "pipeline/settings.h"
#include "proto/feed.pb.h"

namespace kedge::feed {

/// A course is given while the speed is at least this many of its standard deviations, and the tag
/// is not at rest.
inline constexpr double course_speed_sigmas_min = 2.0;

class MessageSink {
 public:
  MessageSink() = default;
  MessageSink(const MessageSink&) = delete;
  MessageSink& operator=(const MessageSink&) = delete;
  virtual ~MessageSink() = default;

  /// Takes the next message of the canonical stream; it is valid during the call only.
  virtual void message(const v1::Message& message) = 0;
};

/// Turns every report into its messages (a track report: Position, then Speed) and passes them on at
/// once. Verdicts are not messages. A figure that is not finite is left out like one not known.
class MessageStream : public pipeline::ReportSink {
 public:
  /// Both must outlive the stream.
  MessageStream(const pipeline::Settings& settings, MessageSink& sink);

  void utc_offset(TimeNs utc_minus_monotonic_ns) override;
  void publish(const pipeline::TrackReport& report) override;
  void publish(const pipeline::TagHealthReport& report) override;
  void publish(const pipeline::AnchorHealthReport& report) override;
  void publish(const pipeline::StationHealthReport& report) override;
  void publish(const pipeline::PulseReport& report) override;
  void verdict(const pipeline::Verdict& verdict) override;

  /// Number of the newest message; 0 before the first.
  [[nodiscard]] std::uint64_t sequence() const { return sequence_; }

  /// State visitor, see core/archive.h: a stream that goes on from a checkpoint numbers on.
  template <class Archive>
  void fields(Archive& archive) {
    archive(sequence_, utc_minus_monotonic_ns_);
  }

 private:
  [[nodiscard]] TimeNs utc_of(TimeNs time_ns) const { return add_saturating(time_ns, utc_minus_monotonic_ns_); }
  v1::Health& health(TimeNs time_ns, const pipeline::Concerns& concerns);
  void send();

  const pipeline::Settings& settings_;
  MessageSink& sink_;
  v1::Message message_;  ///< reused from one message to the next
  std::uint64_t sequence_ = 0;
  TimeNs utc_minus_monotonic_ns_ = 0;
};

}  // namespace kedge::feed
