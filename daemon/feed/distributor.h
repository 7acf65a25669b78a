// From the one canonical stream to its subscribers: everything of a feed server but the sockets.
//
// A subscriber is greeted, given the newest message of every kind and subject (the snapshot), and then
// gets the stream. Distributor and Subscribers belong to one thread.
#pragma once

#include <cstddef>
#include <cstdint>
#include <functional>
#include <map>
#include <memory>
#include <string>
#include <utility>
#include <vector>

#include "core/result.h"
#include "feed/encoding.h"
#include "feed/messages.h"
#include "feed/outbox.h"
#include "feed/subscription.h"
#include "pipeline/settings.h"

namespace kedge::feed {

class Subscriber {
 public:
  /// `opening`: Greeting and snapshot, encoded; they come first and are never dropped.
  Subscriber(Subscription subscription, OutboxLimits limits, std::string opening, std::function<void()> on_ready);

  /// What to write to the client next; null when nothing waits.
  [[nodiscard]] SharedBytes next();

  [[nodiscard]] std::uint64_t messages_lost() const { return outbox_.lost_total(); }

  /// Queues the message if this subscriber wants it.
  void offer(EncodedMessage& message);

 private:
  Subscription subscription_;
  Outbox outbox_;
  SharedBytes opening_;
  std::function<void()> on_ready_;
};

class Distributor : public MessageSink {
 public:
  /// `settings` must outlive it.
  Distributor(const pipeline::Settings& settings, std::string version, OutboxLimits limits);

  /// `on_ready` is called, from within message(), when the first bytes come to wait for an idle
  /// subscriber; not for the opening, which waits at once. Dropping the pointer ends the subscription.
  [[nodiscard]] Result<std::shared_ptr<Subscriber>> subscribe(const Request& request, std::function<void()> on_ready);

  void message(const v1::Message& message) override;

  /// Subscribers there are now.
  [[nodiscard]] std::size_t subscribers() const;

  /// Messages that subscribers, past ones included, were too slow for.
  [[nodiscard]] std::uint64_t messages_lost() const { return messages_lost_; }

 private:
  const pipeline::Settings& settings_;
  std::string version_;
  OutboxLimits limits_;
  std::uint64_t sequence_ = 0;
  std::uint64_t messages_lost_ = 0;
  /// Newest message of each kind about each subject.
  std::map<std::pair<int, std::string>, std::shared_ptr<EncodedMessage>> newest_;
  std::vector<std::weak_ptr<Subscriber>> subscribers_;
};

}  // namespace kedge::feed
