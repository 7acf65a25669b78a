#include "feed/greeting.h"

#include <string>

namespace kedge::feed {

std::string_view caution() {
  return "Positions are estimates that can be wrong without warning; not for collision avoidance, personnel protection "
         "or any safety function. Radio use, moving machinery and flights follow local codes and licensed practice. "
         "Tracking people falls under local privacy law.";
}

v1::Message greeting(const pipeline::Settings& settings, std::string_view version, std::uint64_t after_sequence) {
  v1::Message message;
  v1::Greeting& greeting = *message.mutable_greeting();
  greeting.set_program("kedged");
  greeting.set_version(std::string(version));
  greeting.set_site(settings.site.name);
  for (const pipeline::TagSettings& tag : settings.tags) greeting.add_tags(tag.model.name);
  for (const fusion::Anchor& anchor : settings.site.anchors) greeting.add_anchors(anchor.name);
  greeting.set_caution(std::string(caution()));
  greeting.set_after_sequence(after_sequence);
  return message;
}

}  // namespace kedge::feed
