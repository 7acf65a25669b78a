// A folder of logs as the packets that devices would have sent, in order of time.
#pragma once

#include <cstdint>
#include <filesystem>
#include <optional>
#include <string>
#include <vector>

#include "convert/log_tables.h"
#include "convert/options.h"

namespace kedge::convert {

/// One device's packet: a row of a log.
struct LogEvent {
  enum class Kind : std::uint8_t { inertial, travel, range };

  TimeNs time_ns = 0;
  Kind kind = Kind::inertial;
  std::uint32_t tag = 0;  ///< index into LogFolder::tags
  std::uint32_t row = 0;
};

struct LogTag {
  std::string name;  ///< for the configuration: "tag1" where the logs say 1
  std::uint32_t device_id = 0;
};

class LogFolder {
 public:
  /// Reads and selects. Fails at the first thing wrong, with file and line.
  [[nodiscard]] static Result<LogFolder> read(const std::filesystem::path& path, const Options& options);

  [[nodiscard]] const std::vector<AnchorRow>& anchors() const { return anchors_; }
  [[nodiscard]] const std::vector<LogTag>& tags() const { return tags_; }
  /// By time, none before 0; not empty. At equal times inertial before travel before range, then in the order
  /// of the file.
  [[nodiscard]] const std::vector<LogEvent>& events() const { return events_; }
  /// What was added to all times of the logs, because a station's clock is never below 0.
  [[nodiscard]] std::int64_t shift_s() const { return shift_s_; }
  /// The packet's body; device, number and time are left to the caller.
  [[nodiscard]] packets::v1::Packet packet(const LogEvent& event) const;
  /// "FILE:LINE" of an event.
  [[nodiscard]] std::string place(const LogEvent& event) const;

 private:
  explicit LogFolder(RangeLog ranges) : ranges_(std::move(ranges)) {}

  Status select_anchors(const std::vector<std::uint32_t>& wanted);
  Status select_tags(const TagList& list, const std::vector<std::string>& wanted);
  Status check_gaps() const;
  void begin_at_zero_or_later();
  Status add_ranges();
  void add_events(const LogTable& log, LogEvent::Kind kind);

  std::vector<AnchorRow> anchors_;
  std::vector<LogTag> tags_;
  std::vector<std::optional<std::uint32_t>> selected_;  ///< by TagList index: index into tags_
  RangeLog ranges_;
  std::optional<InertialLog> inertial_;
  std::optional<TravelLog> travel_;
  std::vector<LogEvent> events_;
  std::int64_t shift_s_ = 0;
};

}  // namespace kedge::convert
