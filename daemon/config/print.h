// The effective configuration as text: merged, every default written out. It is what `kedged --print`
// shows and what a capture carries, and loading it gives the same settings.
#pragma once

#include <string>

#include "proto/config.pb.h"

namespace kedge::config {

/// Text format, fields in the order of the proto. Precondition: as settings_from.
[[nodiscard]] std::string print(const v1::Configuration& configuration);

}  // namespace kedge::config
