// Any text as a configuration: errors or a configuration, never both; and what loads can be printed and
// loaded again to the same.
#include <cstdint>
#include <cstdlib>
#include <string_view>

#include "config/load.h"
#include "config/print.h"
#include "config/settings.h"

using namespace kedge;

namespace {

void require(bool condition) {
  if (!condition) std::abort();
}

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  const config::Loaded loaded = config::load_text(text, "fuzz");
  require(loaded.errors.empty() == loaded.merged.has_value());
  for (const std::string& error : loaded.errors) require(error.starts_with("fuzz:"));
  if (!loaded.merged) return 0;
  const pipeline::Settings settings = config::settings_from(*loaded.merged);
  require(!settings.site.anchors.empty());
  for (const pipeline::TagSettings& tag : settings.tags) {
    require(tag.device_id != 0 && tag.hard_iron_ut.allFinite() && tag.soft_iron.allFinite());
  }
  const std::string printed = config::print(*loaded.merged);
  const config::Loaded again = config::load_text(printed, "printed");
  require(again.merged.has_value() && config::print(*again.merged) == printed);
#ifdef KEDGE_PLANTED_BUG
  // False for every good configuration but those with the first anchor at the height the corpus has it.
  require(settings.site.anchors.front().position_m.z() == 3.0);
#endif
  return 0;
}
