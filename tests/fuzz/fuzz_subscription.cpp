// Any bytes from a client: nothing crashes, and it is the same request, or refusal, however they are cut.
#include <cstdint>
#include <cstdlib>
#include <span>

#include "feed/subscription.h"

using namespace kedge;

namespace {

void require(bool condition) {
  if (!condition) std::abort();
}

pipeline::Settings one_tag() {
  pipeline::Settings settings;
  settings.site.name = "yard";
  settings.tags.resize(1);
  settings.tags[0].model.name = "cart-1";
  return settings;
}

struct Reading {
  bool refused = false;
  std::optional<feed::Request> request;
};

/// The bytes in pieces of `step`.
Reading read(std::span<const std::byte> bytes, std::size_t step) {
  feed::RequestReader reader;
  Reading reading;
  for (std::size_t at = 0; at < bytes.size() && !reading.refused; at += step) {
    auto taken = reader.take(bytes.subspan(at, std::min(step, bytes.size() - at)));
    reading.refused = !taken.ok();
    if (reading.refused) {
      require(!taken.error().empty() && taken.error().find('\n') == std::string::npos);
    } else if (taken->has_value()) {
      require(!reading.request.has_value());
      reading.request = **taken;
    }
  }
  return reading;
}

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  static const pipeline::Settings settings = one_tag();
  const auto bytes = std::as_bytes(std::span(data, size));
  const Reading whole = read(bytes, std::max<std::size_t>(size, 1));
  const Reading cut = read(bytes, 1 + size % 7);
  require(whole.refused == cut.refused);
  if (whole.refused || !whole.request) return 0;
  require(whole.request->subscribe.SerializeAsString() == cut.request->subscribe.SerializeAsString());
  const auto subscription = feed::Subscription::make(*whole.request, settings);
  require(subscription.ok() || !subscription.error().empty());
#ifdef KEDGE_PLANTED_BUG
  // False for a rate that is none.
  require(subscription.ok());
#endif
  return 0;
}
