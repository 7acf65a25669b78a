// What a configuration says, beyond its syntax: complete, within range, free of contradictions.
#pragma once

#include <vector>

#include "config/source.h"

namespace kedge::config {

/// Every problem of the merged configuration, each at the field it concerns or, where that is missing,
/// at the nearest enclosing one.
[[nodiscard]] std::vector<Problem> check(const Source& source);

}  // namespace kedge::config
