#include "app/conduit.h"

#include <utility>

namespace kedge::app {

using pipeline::VerdictCode;

std::string_view word(VerdictCode code) {
  static constexpr std::array<std::string_view, verdict_count> words = {
      "used",      "noted",          "gated",          "implausible",      "too_late", "from_future",
      "duplicate", "unknown_device", "unknown_anchor", "beyond_range_max", "malformed"};
  static_assert(static_cast<std::size_t>(VerdictCode::malformed) + 1 == verdict_count);
  return words.at(static_cast<std::size_t>(code));
}

Conduit::Conduit(pipeline::Settings settings, feed::MessageSink& sink, RefusalLog refusal_log)
    : settings_(std::move(settings)), stream_(settings_, sink, std::move(refusal_log)), engine_(settings_, stream_) {}

std::uint64_t Conduit::verdicts(VerdictCode code) const { return stream_.verdicts.at(static_cast<std::size_t>(code)); }

void Conduit::Stream::verdict(const pipeline::Verdict& verdict) {
  ++verdicts.at(static_cast<std::size_t>(verdict.code));
  const bool refused = verdict.code != VerdictCode::used && verdict.code != VerdictCode::noted;
  if (refused && refusal_log_) refusal_log_(verdict);
}

}  // namespace kedge::app
