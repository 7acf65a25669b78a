#include "config/print.h"

#include <google/protobuf/text_format.h>

#include "config/settings.h"
#include "core/assert.h"

namespace kedge::config {

std::string print(const v1::Configuration& configuration) {
  std::string text;
  KEDGE_ASSERT(google::protobuf::TextFormat::PrintToString(with_defaults(configuration), &text));
  return text;
}

}  // namespace kedge::config
