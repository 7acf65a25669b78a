// What the lookout knows, and how it shows it.
#pragma once

#include <cstddef>
#include <cstdint>
#include <map>
#include <optional>
#include <string>

#include "core/time.h"
#include "proto/feed.pb.h"

namespace kedge::lookout {

/// Of a terminal, in characters.
struct Extent {
  std::size_t columns = 100;
  std::size_t rows = 40;
};

class Board {
 public:
  /// now_ns: monotonic time of the receipt.
  void take(const feed::v1::Message& message, TimeNs now_ns);

  /// The picture for a terminal, at most `extent` large, lines ended by '\n'; with colours if asked for.
  [[nodiscard]] std::string screen(Extent extent, bool colour, TimeNs now_ns) const;
  /// The same as lines for a file or a pipe, without a limit.
  [[nodiscard]] std::string lines(TimeNs now_ns) const;
  /// The same as one JSON object and a line feed.
  [[nodiscard]] std::string json() const;

  /// Every tag of the site has been told of.
  [[nodiscard]] bool complete() const;

  /// Messages received for each tag and the worst latency, as one JSON object and a line feed. The
  /// latency is from the instant a position holds for to its receipt, where both are of one machine;
  /// messages that were old when this subscriber came do not count for it.
  [[nodiscard]] std::string summary() const;

 private:
  struct Tag {
    std::optional<feed::v1::Position> position;
    std::optional<feed::v1::Speed> speed;
    std::optional<feed::v1::Health> health;
    TimeNs health_received_ns = 0;
    std::uint64_t messages = 0;
    std::optional<TimeNs> worst_latency_ns;
  };

  [[nodiscard]] std::string head(TimeNs now_ns) const;
  [[nodiscard]] static std::string row(const std::string& name, const Tag& tag, TimeNs now_ns);
  [[nodiscard]] static std::string mirror_row(const feed::v1::Mirror& mirror);
  [[nodiscard]] std::string anchors_row() const;

  feed::v1::Greeting greeting_;
  std::map<std::string, Tag> tags_;
  std::map<std::string, feed::v1::Health> anchors_;
  std::optional<feed::v1::Health> station_;
  TimeNs first_ns_ = 0;
  TimeNs last_utc_ns_ = 0;
  std::uint64_t messages_ = 0;
  std::uint64_t messages_lost_ = 0;
};

}  // namespace kedge::lookout
