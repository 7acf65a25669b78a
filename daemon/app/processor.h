// The features of the processor that mathematical libraries choose their code by: results are the same
// for one build on one set of them.
#pragma once

#include <string>

namespace kedge::app {

/// One line, for the head of a capture.
[[nodiscard]] std::string processor_features();

}  // namespace kedge::app
