// What waits for one subscriber: bounded in messages and in bytes, so that a slow client can neither
// hold up the engine nor grow the station.
//
// When it is full the oldest messages go. The subscriber is told: a Gap, exact in number and range,
// stands where the lost messages would have been.
#pragma once

#include <cstddef>
#include <cstdint>
#include <deque>

#include "feed/encoding.h"

namespace kedge::feed {

struct OutboxLimits {
  std::size_t messages_max = 2000;
  std::size_t bytes_max = 1 << 20;
};

class Outbox {
 public:
  Outbox(OutboxLimits limits, Encoding encoding) : limits_(limits), encoding_(encoding) {}

  /// Appends a message of the canonical stream, dropping the oldest ones while a limit is passed (a
  /// message that alone is longer than bytes_max is dropped itself).
  void push(std::uint64_t sequence, SharedBytes bytes);

  /// Takes out what is to be written next: the Gap, if messages were lost since the last call, or
  /// the oldest message. Null when nothing waits.
  [[nodiscard]] SharedBytes pop();

  [[nodiscard]] bool empty() const { return waiting_.empty() && lost_ == 0; }
  [[nodiscard]] std::size_t size() const { return waiting_.size(); }
  [[nodiscard]] std::size_t bytes() const { return bytes_; }

  /// Dropped since the beginning.
  [[nodiscard]] std::uint64_t lost_total() const { return lost_total_; }

 private:
  struct Waiting {
    std::uint64_t sequence;
    SharedBytes bytes;
  };

  void drop_oldest();

  OutboxLimits limits_;
  Encoding encoding_;
  std::deque<Waiting> waiting_;
  std::size_t bytes_ = 0;
  std::uint64_t lost_ = 0;  ///< since the last Gap, with the range below
  std::uint64_t lost_first_ = 0;
  std::uint64_t lost_last_ = 0;
  std::uint64_t lost_total_ = 0;
};

}  // namespace kedge::feed
