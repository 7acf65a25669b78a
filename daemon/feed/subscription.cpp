#include "feed/subscription.h"

#include <fmt/format.h>
#include <google/protobuf/util/json_util.h>

#include <algorithm>
#include <cmath>
#include <string_view>

namespace kedge::feed {
namespace {

constexpr std::string_view example = R"({"subscribe":{}})";

/// The text on one line, what does not print replaced, cut at a bearable length.
std::string one_line(std::string_view text) {
  std::string line(text.substr(0, 200));
  std::replace_if(
      line.begin(), line.end(), [](char c) { return c < 0x20 || c > 0x7e; }, ' ');
  line.erase(line.find_last_not_of(' ') + 1);
  return line;
}

/// Whether a first byte '{' opens JSON rather than gives a length of 123 (proto/feed.proto, ClientMessage).
bool opens_json(char second) { return second == '"' || second == ' ' || second == '}'; }

Result<Request> request_from(const v1::ClientMessage& message, Encoding came_as) {
  if (!message.has_subscribe()) return Error{fmt::format("the message is empty; a client begins with {}", example)};
  Request request{message.subscribe(), came_as};
  switch (request.subscribe.encoding()) {
    case v1::Encoding::same:
      return request;
    case v1::Encoding::json:
      request.encoding = Encoding::json;
      return request;
    case v1::Encoding::delimited:
      request.encoding = Encoding::delimited;
      return request;
    default:
      break;
  }
  return Error{fmt::format("subscribe.encoding {} is unknown; there are same 0, json 1 and delimited 2",
                           static_cast<int>(request.subscribe.encoding()))};
}

Result<Request> read_json(const std::string& line) {
  v1::ClientMessage message;
  const auto status = google::protobuf::util::JsonStringToMessage(line, &message);
  if (!status.ok()) {
    return Error{fmt::format("the line is not a request: {}; the simplest is {}", one_line(status.message().ToString()),
                             example)};
  }
  return request_from(message, Encoding::json);
}

Result<Request> read_delimited(std::string_view bytes) {
  v1::ClientMessage message;
  if (!message.ParseFromArray(bytes.data(), static_cast<int>(bytes.size()))) {
    return Error{fmt::format("{} bytes after the length are not a ClientMessage (proto/feed.proto)", bytes.size())};
  }
  return request_from(message, Encoding::delimited);
}

struct Length {
  std::size_t prefix_bytes = 0;  ///< 0: the varint is not complete
  std::size_t body_bytes = 0;
};

/// Two bytes of varint reach client_message_bytes_max, and more are refused.
Result<Length> read_length(std::string_view bytes) {
  std::size_t length = 0;
  for (std::size_t i = 0; i < bytes.size(); ++i) {
    const auto byte = static_cast<unsigned char>(bytes[i]);
    length |= static_cast<std::size_t>(byte & 0x7FU) << (7 * i);
    if (byte < 0x80) {
      if (length > client_message_bytes_max) break;
      return Length{i + 1, length};
    }
    if (i == 1) {
      return Error{fmt::format("the first bytes are no length up to {}, and no JSON line such as {}",
                               client_message_bytes_max, example)};
    }
  }
  if (length > client_message_bytes_max) {
    return Error{
        fmt::format("a message of {} bytes is announced; the longest is {}", length, client_message_bytes_max)};
  }
  return Length{};
}

}  // namespace

Result<std::optional<Request>> RequestReader::take(std::span<const std::byte> bytes) {
  if (bytes.empty()) return std::optional<Request>{};
  if (done_) return Error{"a connection takes one request; open another one to ask for something else"};
  // One byte beyond the longest message, with its length, is enough to refuse it.
  const std::size_t room = client_message_bytes_max + 3 - held_.size();
  held_.append(reinterpret_cast<const char*>(bytes.data()), std::min(room, bytes.size()));
  const bool all_held = bytes.size() <= room;

  if (held_.front() == '{' && held_.size() == 1) return std::optional<Request>{};
  std::size_t used = 0;
  Result<Request> request = Error{};
  if (held_.front() == '{' && opens_json(held_[1])) {
    const std::size_t end = held_.find('\n');
    if (std::min(end, held_.size()) > client_message_bytes_max) {
      return Error{fmt::format("the line is longer than {} bytes", client_message_bytes_max)};
    }
    if (end == std::string::npos) return std::optional<Request>{};
    used = end + 1;
    request = read_json(held_.substr(0, end));
  } else {
    const Result<Length> length = read_length(held_);
    if (!length) return Error{length.error()};
    used = length->prefix_bytes + length->body_bytes;
    if (length->prefix_bytes == 0 || held_.size() < used) return std::optional<Request>{};
    request = read_delimited(std::string_view(held_).substr(length->prefix_bytes, length->body_bytes));
  }
  if (!request) return Error{request.error()};
  if (used < held_.size() || !all_held) {
    return Error{"more bytes follow the request; a connection takes one, open another one to ask for something else"};
  }
  done_ = true;
  return std::optional<Request>(*std::move(request));
}

Result<Subscription> Subscription::make(const Request& request, const pipeline::Settings& settings) {
  Subscription subscription;
  subscription.encoding_ = request.encoding;
  const v1::Subscribe& subscribe = request.subscribe;
  for (const pipeline::TagSettings& tag : settings.tags) {
    if (subscribe.tags().empty()) subscription.tags_[tag.model.name];
  }
  for (const std::string& name : subscribe.tags()) {
    const auto named = [&](const pipeline::TagSettings& tag) { return tag.model.name == name; };
    if (std::none_of(settings.tags.begin(), settings.tags.end(), named)) {
      return Error{fmt::format("subscribe.tags: there is no tag \"{}\" at this site", one_line(name))};
    }
    subscription.tags_[name];
  }
  if (subscribe.subjects().empty()) subscription.subjects_.fill(true);
  for (const int subject : subscribe.subjects()) {
    if (!v1::Subject::Value_IsValid(subject)) {
      return Error{fmt::format("subscribe.subjects: {} is unknown; there are position 0, speed 1, health 2 and pulse 3",
                               subject)};
    }
    subscription.subjects_.at(static_cast<std::size_t>(subject)) = true;
  }
  const double rate_hz = subscribe.rate_max_hz();
  if (rate_hz != 0.0) {
    if (!(rate_hz >= rate_hz_min && rate_hz <= rate_hz_max)) {
      return Error{fmt::format("subscribe.rate_max_hz {} is outside {} to {}; 0 asks for every message", rate_hz,
                               rate_hz_min, rate_hz_max)};
    }
    subscription.period_ns_ = from_seconds(1.0 / rate_hz);
  }
  return subscription;
}

bool Subscription::covers(const v1::Message& message) const {
  switch (message.body_case()) {
    case v1::Message::kPosition:
      return subjects_[v1::Subject::position] && tags_.contains(message.position().tag());
    case v1::Message::kSpeed:
      return subjects_[v1::Subject::speed] && tags_.contains(message.speed().tag());
    case v1::Message::kHealth:
      return subjects_[v1::Subject::health] && (!message.health().has_tag() || tags_.contains(message.health().tag()));
    case v1::Message::kPulse:
      return subjects_[v1::Subject::pulse];
    default:
      return false;
  }
}

bool Subscription::wants(const v1::Message& message) {
  if (!covers(message)) return false;
  if (period_ns_ == 0 || !(message.has_position() || message.has_speed())) return true;
  const bool is_position = message.has_position();
  Thinning& thinning = tags_.at(is_position ? message.position().tag() : message.speed().tag());
  auto& due_ns = is_position ? thinning.position_due_ns : thinning.speed_due_ns;
  const TimeNs time_ns = is_position ? message.position().time_ns() : message.speed().time_ns();
  if (due_ns && time_ns < *due_ns) return false;
  // Silence does not save up messages for later.
  due_ns = due_ns ? std::max(add_saturating(*due_ns, period_ns_), time_ns) : add_saturating(time_ns, period_ns_);
  return true;
}

}  // namespace kedge::feed
