// Which program this is. Results are the same for one build on one set of processor features, so both
// are written into every capture (the features: app/processor.h).
#pragma once

#include <string>
#include <string_view>

namespace kedge {

/// The project's version, "0.1.0".
std::string_view version();

/// Compiler, target and floating-point rules, one line.
std::string build_identification();

}  // namespace kedge
