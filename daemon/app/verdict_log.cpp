#include "app/verdict_log.h"

#include <spdlog/spdlog.h>

#include "app/conduit.h"

namespace kedge::app {

void VerdictLog::note(const pipeline::Verdict& verdict) {
  if (verdict.code == pipeline::VerdictCode::gated) return;
  std::pair key(verdict.device_id, verdict.code);
  if (last_.size() >= entries_max && last_.count(key) == 0) key.first = 0;
  const auto [at, fresh] = last_.try_emplace(key);
  Last& last = at->second;
  if (!fresh && verdict.arrival_ns - last.logged_ns < 10 * ns_per_s) {
    ++last.left_out;
    return;
  }
  const std::string text = verdict.text.empty() ? "" : fmt::format(": {}", verdict.text);
  const std::string more = last.left_out > 0 ? fmt::format(" ({} more since the last)", last.left_out) : "";
  const std::string who = verdict.device_id == 0 ? "input" : fmt::format("device {}", verdict.device_id);
  spdlog::warn("{}: {}{}{}", who, word(verdict.code), text, more);
  last = {verdict.arrival_ns, 0};
}

}  // namespace kedge::app
