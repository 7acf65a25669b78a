// From the configuration as people write it to what the engine computes with: degrees to radians,
// bearings from true north to headings from site east, defaults filled in.
#pragma once

#include "pipeline/settings.h"
#include "proto/config.pb.h"

namespace kedge::config {

/// The configuration with every default written out; fields whose absence means something (a start,
/// a height, an address) stay absent.
[[nodiscard]] v1::Configuration with_defaults(v1::Configuration configuration);

/// Precondition: `configuration` came out of load() or load_text() without errors.
[[nodiscard]] pipeline::Settings settings_from(const v1::Configuration& configuration);

}  // namespace kedge::config
