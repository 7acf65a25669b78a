// What a subscriber reads first: whom it talks to, and what the positions must not be used for.
#pragma once

#include <cstdint>
#include <string_view>

#include "pipeline/settings.h"
#include "proto/feed.pb.h"

namespace kedge::feed {

/// The caution that every user must see once, word for word.
[[nodiscard]] std::string_view caution();

/// `after_sequence`: number of the newest message of the canonical stream, which this subscriber
/// will not receive as part of the stream.
[[nodiscard]] v1::Message greeting(const pipeline::Settings& settings, std::string_view version,
                                   std::uint64_t after_sequence);

}  // namespace kedge::feed
