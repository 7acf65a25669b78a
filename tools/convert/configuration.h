// The station's configuration that fits a folder of logs.
#pragma once

#include "convert/log_folder.h"
#include "convert/options.h"
#include "core/result.h"
#include "proto/config.pb.h"

namespace kedge::convert {

/// Checked as one that was loaded. Fails with every reason on a line of its own.
[[nodiscard]] Result<config::v1::Configuration> configuration_for(const LogFolder& folder, const Options& options);

}  // namespace kedge::convert
