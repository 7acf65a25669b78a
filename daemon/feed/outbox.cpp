#include "feed/outbox.h"

#include <utility>

#include "core/assert.h"

namespace kedge::feed {

void Outbox::push(std::uint64_t sequence, SharedBytes bytes) {
  bytes_ += bytes->size();
  waiting_.push_back({sequence, std::move(bytes)});
  while (waiting_.size() > limits_.messages_max || bytes_ > limits_.bytes_max) drop_oldest();
}

SharedBytes Outbox::pop() {
  if (lost_ > 0) {
    v1::Message message;
    v1::Gap& gap = *message.mutable_gap();
    gap.set_messages_lost(std::exchange(lost_, 0));
    gap.set_first_sequence(lost_first_);
    gap.set_last_sequence(lost_last_);
    return std::make_shared<const std::string>(encode(message, encoding_));
  }
  if (waiting_.empty()) return nullptr;
  SharedBytes bytes = std::move(waiting_.front().bytes);
  waiting_.pop_front();
  bytes_ -= bytes->size();
  return bytes;
}

void Outbox::drop_oldest() {
  KEDGE_ASSERT(!waiting_.empty());
  const Waiting& oldest = waiting_.front();
  if (lost_ == 0) lost_first_ = oldest.sequence;
  lost_last_ = oldest.sequence;
  ++lost_;
  ++lost_total_;
  bytes_ -= oldest.bytes->size();
  waiting_.pop_front();
}

}  // namespace kedge::feed
