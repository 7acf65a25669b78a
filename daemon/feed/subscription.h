// What a client asks for: its first bytes read with bounds, and the filter that follows from them.
#pragma once

#include <array>
#include <cstddef>
#include <cstdint>
#include <optional>
#include <span>
#include <string>
#include <unordered_map>

#include "core/result.h"
#include "core/time.h"
#include "feed/encoding.h"
#include "pipeline/settings.h"
#include "proto/feed.pb.h"

namespace kedge::feed {

/// Rates a client can ask for, besides 0 for all.
inline constexpr double rate_hz_min = 0.001;
inline constexpr double rate_hz_max = 1000.0;

/// Longest line, and longest delimited message, that a client may send.
inline constexpr std::size_t client_message_bytes_max = 4096;

struct Request {
  v1::Subscribe subscribe;
  Encoding encoding = Encoding::json;  ///< as it came, or as it asks for
};

/// Reads the one Subscribe of a client from however its bytes are cut.
class RequestReader {
 public:
  /// Takes the next bytes; a request once it is complete, nothing until then. An error is final: the
  /// connection is to be closed. A client that says more after its request is in error too.
  [[nodiscard]] Result<std::optional<Request>> take(std::span<const std::byte> bytes);

 private:
  std::string held_;
  bool done_ = false;
};

/// Decides which messages of the canonical stream one subscriber gets.
///
/// With tags named, Position, Speed and tag Health are of those tags alone; Health of anchors and of
/// the station still comes, as it concerns every tag. A rate thins Position and Speed, each tag and
/// kind by itself, in record time: after a message is passed on the next is due one period later. It
/// keeps its phase, so the mean rate is the one asked for although two may stand closer than a period.
/// Nothing is held back: what is passed on is the newest, in order.
class Subscription {
 public:
  /// Refuses a tag that the site does not have, an unknown subject and a rate that is not a rate.
  [[nodiscard]] static Result<Subscription> make(const Request& request, const pipeline::Settings& settings);

  [[nodiscard]] Encoding encoding() const { return encoding_; }

  /// By tag and subject alone.
  [[nodiscard]] bool covers(const v1::Message& message) const;

  /// By tag, subject and rate; to be asked once for each message, in order.
  [[nodiscard]] bool wants(const v1::Message& message);

 private:
  /// When the next message of each kind is due; none was passed on yet where absent.
  struct Thinning {
    std::optional<TimeNs> position_due_ns;
    std::optional<TimeNs> speed_due_ns;
  };

  Encoding encoding_ = Encoding::json;
  std::array<bool, v1::Subject::Value_ARRAYSIZE> subjects_{};
  std::unordered_map<std::string, Thinning> tags_;  ///< those asked for
  TimeNs period_ns_ = 0;                            ///< 0: no thinning
};

}  // namespace kedge::feed
