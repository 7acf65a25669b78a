#include "app/health_log.h"

#include <spdlog/spdlog.h>

#include <string>

namespace kedge::app {
namespace {

std::string subject_of(const feed::v1::Health& health) {
  switch (health.subject_case()) {
    case feed::v1::Health::kTag:
      return "tag " + health.tag();
    case feed::v1::Health::kAnchor:
      return "anchor " + health.anchor();
    default:
      return "station";
  }
}

}  // namespace

void HealthLog::note(const feed::v1::Message& message) {
  if (!message.has_health()) return;
  using feed::v1::Concern;
  using feed::v1::Standing;
  const feed::v1::Health& health = message.health();
  const std::string subject = subject_of(health);
  Last& last = last_[subject];
  if (health.has_tag_health() && health.tag_health().standing() != last.standing) {
    spdlog::info("{}: {} -> {}", subject, Standing::Value_Name(last.standing),
                 Standing::Value_Name(health.tag_health().standing()));
    last.standing = health.tag_health().standing();
  }
  std::set<Concern::Value> now;
  for (const Concern& concern : health.concerns()) {
    now.insert(concern.concern());
    if (last.concerns.count(concern.concern()) == 0) {
      spdlog::warn("{}: {} (figure {:.3g})", subject, Concern::Value_Name(concern.concern()), concern.figure());
    }
  }
  for (const Concern::Value gone : last.concerns) {
    if (now.count(gone) == 0) spdlog::info("{}: {} is over", subject, Concern::Value_Name(gone));
  }
  last.concerns = std::move(now);
}

}  // namespace kedge::app
