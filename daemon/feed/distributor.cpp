#include "feed/distributor.h"

#include <algorithm>

#include "feed/greeting.h"

namespace kedge::feed {
namespace {

/// What the message is about: the name of its tag, anchor or station.
const std::string& subject_of(const v1::Message& message) {
  static const std::string none;
  switch (message.body_case()) {
    case v1::Message::kPosition:
      return message.position().tag();
    case v1::Message::kSpeed:
      return message.speed().tag();
    case v1::Message::kHealth:
      break;
    default:
      return none;
  }
  const v1::Health& health = message.health();
  switch (health.subject_case()) {
    case v1::Health::kTag:
      return health.tag();
    case v1::Health::kAnchor:
      return health.anchor();
    case v1::Health::kStation:
      return health.station();
    case v1::Health::SUBJECT_NOT_SET:
      break;
  }
  return none;
}

/// One place for each kind of message, the three kinds of Health told apart.
int kind_of(const v1::Message& message) {
  const int kind = static_cast<int>(message.body_case()) * 16;
  return message.has_health() ? kind + static_cast<int>(message.health().subject_case()) : kind;
}

}  // namespace

Subscriber::Subscriber(Subscription subscription, OutboxLimits limits, std::string opening,
                       std::function<void()> on_ready)
    : subscription_(std::move(subscription)),
      outbox_(limits, subscription_.encoding()),
      opening_(std::make_shared<const std::string>(std::move(opening))),
      on_ready_(std::move(on_ready)) {}

SharedBytes Subscriber::next() {
  if (opening_) return std::exchange(opening_, nullptr);
  return outbox_.pop();
}

void Subscriber::offer(EncodedMessage& message) {
  if (!subscription_.wants(message.message())) return;
  const bool idle = !opening_ && outbox_.empty();
  outbox_.push(message.message().sequence(), message.bytes(subscription_.encoding()));
  if (idle) on_ready_();
}

Distributor::Distributor(const pipeline::Settings& settings, std::string version, OutboxLimits limits)
    : settings_(settings), version_(std::move(version)), limits_(limits) {}

Result<std::shared_ptr<Subscriber>> Distributor::subscribe(const Request& request, std::function<void()> on_ready) {
  Result<Subscription> subscription = Subscription::make(request, settings_);
  if (!subscription) return Error{subscription.error()};
  const Encoding encoding = subscription->encoding();
  std::vector<EncodedMessage*> snapshot;
  for (const auto& [key, message] : newest_) {
    if (subscription->covers(message->message())) snapshot.push_back(message.get());
  }
  std::sort(snapshot.begin(), snapshot.end(), [](const EncodedMessage* a, const EncodedMessage* b) {
    return a->message().sequence() < b->message().sequence();
  });
  std::string opening = encode(greeting(settings_, version_, sequence_), encoding);
  for (EncodedMessage* message : snapshot) opening += *message->bytes(encoding);
  auto subscriber =
      std::make_shared<Subscriber>(*std::move(subscription), limits_, std::move(opening), std::move(on_ready));
  subscribers_.push_back(subscriber);
  return subscriber;
}

void Distributor::message(const v1::Message& message) {
  sequence_ = message.sequence();
  const auto shared = std::make_shared<EncodedMessage>(message);
  if (!message.has_pulse()) newest_[{kind_of(message), subject_of(message)}] = shared;
  std::erase_if(subscribers_, [](const auto& subscriber) { return subscriber.expired(); });
  // By index: a callback may begin or end a subscription.
  for (std::size_t i = 0; i < subscribers_.size(); ++i) {  // NOLINT(modernize-loop-convert)
    const std::shared_ptr<Subscriber> subscriber = subscribers_[i].lock();
    if (!subscriber) continue;
    const std::uint64_t lost_before = subscriber->messages_lost();
    subscriber->offer(*shared);
    messages_lost_ += subscriber->messages_lost() - lost_before;
  }
}

std::size_t Distributor::subscribers() const {
  return static_cast<std::size_t>(std::count_if(subscribers_.begin(), subscribers_.end(),
                                                [](const auto& subscriber) { return !subscriber.expired(); }));
}

}  // namespace kedge::feed
